"""The commands, one module each; table.py lists them, console.py runs them."""
