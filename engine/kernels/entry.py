"""The kernels' functions for Python, in one place. Importing this loads the compiler."""

from __future__ import annotations

from polewise.kernels.advance import advance
from polewise.kernels.clocks import fire_clocks, next_rank, next_tick
from polewise.kernels.history import delayed_value, start_history
from polewise.kernels.record import record_point
from polewise.kernels.restart import restart
from polewise.kernels.step import attempt_step
from polewise.kernels.tape import live_modes, outside_table, run_jacobian, run_residual, run_residual_live, run_segment

__all__ = [
    "advance",
    "attempt_step",
    "delayed_value",
    "fire_clocks",
    "live_modes",
    "next_rank",
    "next_tick",
    "outside_table",
    "record_point",
    "restart",
    "run_jacobian",
    "run_residual",
    "run_residual_live",
    "run_segment",
    "start_history",
]
