"""How kernels are compiled: once a machine, with as little to compile as can be.

A literal number handed on to a kernel compiles it once more: hand on ``np.int64(0)`` instead.
"""

from __future__ import annotations

from typing import Any

from numba import njit

# Called from Python: wrappers and all.  Division by zero gives infinity, as in numpy.
kernel = njit(cache=True, error_model="numpy")

# Called by kernels only: without the wrappers that unpack Python arguments, which take longer to compile
# than most bodies.
WITHOUT_WRAPPERS: dict[str, Any] = {"no_cpython_wrapper": True, "no_cfunc_wrapper": True}
inner_kernel = njit(cache=True, error_model="numpy", **WITHOUT_WRAPPERS)
