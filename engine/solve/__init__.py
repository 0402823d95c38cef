"""Numerics around the kernels: operating point, events, transient."""
