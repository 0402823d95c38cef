"""The order in which unknowns are eliminated, chosen once per problem so that the factors of its Jacobians stay sparse."""

from __future__ import annotations

from typing import Any, Final

import numpy as np

from polewise.kernels.program import IntArray, Program

# Two orderings are tried: minimum degree on the pattern of A + A^T (nearly symmetric circuits) and column minimum degree (the rest).
# Sources: George & Liu 1981; Davis, Gilbert, Larimore & Ng, ACM Trans. Math. Softw. 30(3), 2004 (both as scipy.sparse has them).
CANDIDATES: Final = ("MMD_AT_PLUS_A", "COLAMD")
SEED: Final = 20240517  # of the values that stand in for the real ones


def elimination_order(program: Program) -> tuple[IntArray, int]:
    """Order of the columns, and the number of entries of L and U together in that order.

    Args:
        program: only the pattern of the Jacobians matters (values at the start may be zero or equal by chance).

    Returns:
        order: shape (n,), column eliminated k-th. fill: entries in the factors, an estimate for the room they need.
    """
    import warnings

    from scipy.sparse import SparseEfficiencyWarning, csc_matrix
    from scipy.sparse.linalg import splu

    n = program.n
    values = _stand_in_values(program)
    pattern = csc_matrix((values, program.row_idx, program.col_ptr), shape=(n, n))
    best: tuple[IntArray, int] | None = None
    for name in CANDIDATES:
        options: dict[str, Any] = {"permc_spec": name, "diag_pivot_thresh": 0.1}
        if name == "MMD_AT_PLUS_A":
            options["options"] = {"SymmetricMode": True}
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore", SparseEfficiencyWarning)
                factors = splu(pattern, **options)
        except RuntimeError:  # singular whatever the values: the kernels say which unknown when they meet it
            continue
        fill = int(factors.L.nnz + factors.U.nnz)
        if best is None or fill < best[1]:
            best = np.argsort(factors.perm_c).astype(np.int64), fill
    if best is None:
        return np.arange(n, dtype=np.int64), 8 * len(program.row_idx)
    return best


def _stand_in_values(program: Program) -> Any:
    """Random values on the pattern; entries that are structurally zero stay zero."""
    generator = np.random.default_rng(SEED)
    values = generator.uniform(0.5, 1.5, size=len(program.row_idx)) * generator.choice([-1.0, 1.0], size=len(program.row_idx))
    zero = int(np.flatnonzero(program.constants == 0.0)[0]) if np.any(program.constants == 0.0) else -1
    algebraic = program.q_reg[program.row_idx] < 0
    empty = (program.jf_reg == zero) & ((program.jq_reg == zero) | algebraic)
    values[empty] = 0.0
    return values
