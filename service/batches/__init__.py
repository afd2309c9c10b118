"""Request bytes to columns of checked rows; pure."""
