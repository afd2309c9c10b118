"""The web, as its callers meet it."""
