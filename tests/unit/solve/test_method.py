"""The method's coefficients: conditions hold, digits agree with closed forms, a wrong digit is noticed."""

from __future__ import annotations

from dataclasses import fields

import numpy as np
import pytest

from polewise.solve.method import RADAU_IIA, CollocationMethod, MethodError


def test_closed_forms():
    """Source: Hairer & Wanner, Solving Ordinary Differential Equations II, table IV.5.6."""
    root = np.sqrt(6.0)
    a = np.array(
        [
            [(88 - 7 * root) / 360, (296 - 169 * root) / 1800, (-2 + 3 * root) / 225],
            [(296 + 169 * root) / 1800, (88 + 7 * root) / 360, (-2 - 3 * root) / 225],
            [(16 - root) / 36, (16 + root) / 36, 1 / 9],
        ]
    )
    np.testing.assert_allclose(RADAU_IIA.matrix, a, rtol=1e-13)
    np.testing.assert_allclose(RADAU_IIA.nodes, [(4 - root) / 10, (4 + root) / 10, 1.0], rtol=1e-15)
    eigenvalues = np.linalg.eigvals(np.linalg.inv(a))
    assert min(abs(eigenvalues - RADAU_IIA.real_eigenvalue)) < 1e-12
    assert min(abs(eigenvalues - RADAU_IIA.complex_eigenvalue)) < 1e-12


def test_damps_infinitely_stiff_modes_at_once():
    assert RADAU_IIA.stability_at_infinity < 1e-13


@pytest.mark.parametrize("name", ["nodes", "matrix_inverse", "transform", "transform_inverse", "estimate"])
def test_a_wrong_digit_is_noticed(name):
    values = {f.name: getattr(RADAU_IIA, f.name) for f in fields(RADAU_IIA) if f.init}
    wrong = values[name].copy()
    wrong.flat[1] += 1e-9
    with pytest.raises(MethodError, match="violate"):
        CollocationMethod(**(values | {name: wrong}))
