"""Simulated instruments: TCP servers that behave like a bench with a board on it."""
