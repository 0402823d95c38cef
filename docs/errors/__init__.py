"""One page for each diagnostic code."""
