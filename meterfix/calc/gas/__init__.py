"""Equations of state, property tiles, calorific value, transport properties."""
