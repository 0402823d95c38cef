"""Properties that hold for any input, with generators in strategies.py."""
