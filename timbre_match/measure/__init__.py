"""Cycles to recipe to profile."""
