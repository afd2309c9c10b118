"""Amounts to digits, reference laws and measures; pure NumPy and SciPy.

Papers and their symbols are cited from memory; the tests hold each formula against an identity,
another program or a simulation, not against its citation.
"""
