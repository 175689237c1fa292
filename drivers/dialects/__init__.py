"""Shipped dialects: one TOML file for each kind of instrument."""
