"""Predicted against observed on a department's own records."""
