"""A circuit as d/dt q(x) + f(x, t, p) = 0 of index 1."""
