"""How kernels are compiled: without the interpreter's lock, with division as in hardware, small private ones without entry points.

Kernels that are called from one place only are `inline="always"`: their text becomes part of the caller's, which saves compiling them apart.
"""

from __future__ import annotations

from typing import Any, Final

KERNEL: Final[dict[str, Any]] = {"nogil": True, "error_model": "numpy"}  # callable from Python
INNER: Final[dict[str, Any]] = {**KERNEL, "no_cpython_wrapper": True, "no_cfunc_wrapper": True}  # called by kernels only
