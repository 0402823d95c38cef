"""The kernels that Python calls, in one place."""

from __future__ import annotations

from polewise.kernels.advance import advance
from polewise.kernels.clocks import fire_clocks, next_rank
from polewise.kernels.record import record_point
from polewise.kernels.restart import restart
from polewise.kernels.tape import run_jacobian, run_residual, run_residual_live, run_segment

__all__ = ["advance", "fire_clocks", "next_rank", "record_point", "restart", "run_jacobian", "run_residual", "run_residual_live", "run_segment"]
