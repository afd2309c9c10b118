"""The method, written down for those who must judge it, and served as one page."""
