"""Published checks, shipped so that they can be re-run anywhere."""
