"""The integration method as data that checks its own defining conditions: Radau IIA with three stages, order 5.

The kernels take the same numbers from kernels.radau; building RADAU_IIA (once, in a test and wherever it is imported) proves them.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Final

import numpy as np

from polewise.kernels import radau
from polewise.kernels.program import FloatArray

CHECK_TOLERANCE: Final = 1e-13  # what the conditions may miss by: rounding of three-digit sums


class MethodError(AssertionError):
    """A coefficient violates a condition that defines the method."""


@dataclass(frozen=True, slots=True, eq=False)
class CollocationMethod:
    """A stiffly accurate collocation method with one real and one complex pair of eigenvalues, and its embedded error estimate.

    Args:
        nodes: shape (3,), c; the last is 1.
        matrix_inverse: shape (3, 3), A^-1.
        transform, transform_inverse: shape (3, 3), T and T^-1; T^-1 A^-1 T is block diagonal.
        real_eigenvalue: gamma. complex_eigenvalue: alpha + i beta, of A^-1.
        estimate: shape (3,), E: the filtered estimate is (gamma/h Cq + Jf)^-1 (-f(x_n) + sum_j E_j (q(X_j) - q_n) / h).
        order: order of the solution; estimate_order: order up to which the embedded solution agrees with the exact one.

    Raises:
        MethodError: naming the condition that fails.
    """

    nodes: FloatArray
    matrix_inverse: FloatArray
    transform: FloatArray
    transform_inverse: FloatArray
    real_eigenvalue: float
    complex_eigenvalue: complex
    estimate: FloatArray
    order: int = 5
    stage_order: int = 3
    estimate_order: int = 3
    matrix: FloatArray = field(init=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "matrix", np.linalg.inv(self.matrix_inverse))
        a, c, b = self.matrix, self.nodes, self.matrix[-1]
        # Hairer & Wanner II, IV.5: B(p) and C(q) with p = 5, q = 3, and D(2), give order 5.
        for k in range(1, self.order + 1):
            _require(b @ c ** (k - 1) - 1.0 / k, f"B({self.order}), row {k}")
        for k in range(1, self.stage_order + 1):
            _require(a @ c ** (k - 1) - c**k / k, f"C({self.stage_order}), row {k}")
        for k in range(1, self.order - self.stage_order + 1):
            _require((b * c ** (k - 1)) @ a - b * (1.0 - c**k) / k, f"D({self.order - self.stage_order}), row {k}")
        _require(c[-1] - 1.0, "stiffly accurate: the last stage is the solution")
        gamma, alpha, beta = self.real_eigenvalue, self.complex_eigenvalue.real, self.complex_eigenvalue.imag
        blocks = np.array([[gamma, 0.0, 0.0], [0.0, alpha, -beta], [0.0, beta, alpha]])
        _require(self.transform_inverse @ self.transform - np.eye(3), "T^-1 T = 1")
        _require(self.transform_inverse @ self.matrix_inverse @ self.transform - blocks, "T^-1 A^-1 T block diagonal")
        _require(self.transform[-1] - np.array([1.0, 1.0, 0.0]), "last row of T is (1, 1, 0)")
        self._check_estimate()

    def _check_estimate(self) -> None:
        """On y' = f(t) the embedded solution y_n + h (b0 f(0) + sum b_j f(c_j)) must be exact to estimate_order, with b0 = 1 / gamma.

        Its difference to the solution, times gamma: f(0) + sum_j E_j (y(c_j) - y_0) / h with collocated y, so E A acts on f(c_j).
        """
        weights = self.estimate @ self.matrix  # of f(c_j) in gamma (y_hat - y)
        for k in range(self.estimate_order):
            at_start = 1.0 if k == 0 else 0.0
            _require(at_start + weights @ self.nodes**k, f"estimate exact on polynomials of degree {k}")
        if abs(weights @ self.nodes**self.estimate_order) < CHECK_TOLERANCE:
            raise MethodError("the estimate vanishes one degree too high: it would measure nothing")

    @property
    def stability_at_infinity(self) -> float:
        """|R(inf)|; 0 is L-stable."""
        return float(abs(1.0 - self.matrix[-1] @ self.matrix_inverse @ np.ones(3)))


def _require(residue: FloatArray | float, what: str) -> None:
    if not np.all(np.abs(np.asarray(residue)) <= CHECK_TOLERANCE * 10):
        raise MethodError(f"Radau coefficients violate {what} by {np.max(np.abs(np.asarray(residue))):.3g}")


def radau_iia() -> CollocationMethod:
    """The method with the numbers the kernels use."""
    r = radau
    return CollocationMethod(
        nodes=np.array([r.C1, r.C2, 1.0]),
        matrix_inverse=np.array([[r.V11, r.V12, r.V13], [r.V21, r.V22, r.V23], [r.V31, r.V32, r.V33]]),
        transform=np.array([[r.T11, r.T12, r.T13], [r.T21, r.T22, r.T23], [1.0, 1.0, 0.0]]),
        transform_inverse=np.array([[r.I11, r.I12, r.I13], [r.I21, r.I22, r.I23], [r.I31, r.I32, r.I33]]),
        real_eigenvalue=r.GAMMA,
        complex_eigenvalue=complex(r.ALPHA, r.BETA),
        estimate=np.array([r.E1, r.E2, r.E3]),
    )


RADAU_IIA: Final = radau_iia()
