"""Corrected gas totals, envelope balances and their proof, from raw differential-pressure logs."""

__version__ = "0.1.0"
