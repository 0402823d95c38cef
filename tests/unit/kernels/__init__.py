"""Tests of the compiled kernels against slow twins and closed forms."""
