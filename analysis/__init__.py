"""Numerics of the proof: arrays in, results out; no files, clock, printing or logging."""
