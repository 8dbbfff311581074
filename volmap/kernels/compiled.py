"""How kernels are compiled: once a machine, with as little to compile as can be.

A literal number handed on to a kernel compiles it once more: hand on ``np.int64(0)`` instead.
"""

from __future__ import annotations

import ctypes
import gc
from collections.abc import Callable
from typing import Any

from numba import njit
from numba.core import event
from numba.core.codegen import JITCodeLibrary
from numba.core.compiler import Compiler

WITHOUT_WRAPPERS: dict[str, Any] = {"no_cpython_wrapper": True, "no_cfunc_wrapper": True}


def kernel(function: Callable[..., Any]) -> Any:
    """Compile a function that Python calls; division by zero gives infinity, as in numpy.

    It runs without Python's lock, so that `threads.on_threads` can share it out.
    """
    return njit(cache=True, nogil=True, error_model="numpy")(function)


def inner_kernel(function: Callable[..., Any]) -> Any:
    """Compile a function that only kernels call: once for each of these, without code of its own.

    It goes without the wrappers that unpack Python's arguments, which take longer to compile than most
    bodies.  To call it in a test, compile ``kernel(inner.py_func)``.
    """
    return njit(error_model="numpy", pipeline_class=_InnerCompiler, **WITHOUT_WRAPPERS)(function)


class _NoEnvironment:
    def set_env(self, *_: object) -> None:
        """Nothing to set: an inner kernel has no code of its own in memory."""


class _HandedOn(JITCodeLibrary):
    """Code of an inner kernel: handed to the kernels that call it, which optimise it together with theirs."""

    def finalize(self) -> None:
        """Link what it calls; no optimising and no machine code."""
        self._raise_if_finalized()
        for library in dict.fromkeys(self._linking_libraries):
            self._reload_init.update(library._reload_init)
            self._final_module.link_in(library._get_module_for_linking(), preserve=True)
        self._finalize_dynamic_globals()
        self._finalized = True

    def get_pointer_to_function(self, name: str) -> int:
        """What a call from Python ends in: a TypeError of CPython's own (a null address would be a crash)."""
        self._ensure_finalized()
        return int(ctypes.cast(ctypes.pythonapi.PyObject_Call, ctypes.c_void_p).value or 0)

    @property
    def codegen(self) -> _NoEnvironment:
        """What numba asks only to set a function's environment."""
        return _NoEnvironment()


class _InnerCompiler(Compiler):
    def define_pipelines(self) -> Any:
        codegen = self.state.targetctx.codegen()
        self.state.library = _HandedOn(codegen, self.state.func_id.func_qualname)
        return super().define_pipelines()


class _WithoutCollections(event.Listener):
    """Keeps Python's collector of cycles out of compilations, whose many objects it would visit in vain."""

    def __init__(self) -> None:
        self.depth = 0
        self.was_on = True

    def on_start(self, _event: object) -> None:
        if self.depth == 0:
            self.was_on = gc.isenabled()
            gc.disable()
        self.depth += 1

    def on_end(self, _event: object) -> None:
        self.depth -= 1
        if self.depth == 0 and self.was_on:
            gc.enable()


event.register("numba:compile", _WithoutCollections())
