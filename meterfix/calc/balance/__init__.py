"""Envelopes and their imbalance."""
