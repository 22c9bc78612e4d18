"""Comparison to what the trade tries."""
