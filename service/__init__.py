"""Tallyward: a service that watches the digits of payment amounts."""

__version__ = "0.1.0"
