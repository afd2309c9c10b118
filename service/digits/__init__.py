"""Amounts to digits, reference laws and measures; pure NumPy and SciPy."""
