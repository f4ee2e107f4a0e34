"""The consult note: document, text, JSON, HTML, PDF and charts."""
