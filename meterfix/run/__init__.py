"""Orchestration: passes, closing, replay; the only reader of the clock."""
