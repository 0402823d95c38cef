"""Compiled code: tapes, sparse factors, steps. Plain arrays in, status numbers out."""
