"""How kernels are compiled: once a machine, with as little to compile as can be.

A literal number handed on to a kernel compiles it once more: hand on ``np.int64(0)`` instead.
"""

from __future__ import annotations

import ctypes
import gc
from collections.abc import Callable
from typing import Any

from numba import njit
from numba.core import event, typed_passes, types, untyped_passes
from numba.core.codegen import JITCodeLibrary
from numba.core.compiler import Compiler, Flags
from numba.core.compiler_machinery import PassManager, register_pass
from numba.core.targetconfig import ConfigStack

WITHOUT_WRAPPERS: dict[str, Any] = {"no_cpython_wrapper": True, "no_cfunc_wrapper": True}


def kernel(function: Callable[..., Any]) -> Any:
    """Compile a function that Python calls; division by zero gives infinity, as in numpy.

    It runs without Python's lock, so that `threads.on_threads` can share it out.
    """
    return njit(cache=True, nogil=True, error_model="numpy", pipeline_class=_KernelCompiler)(function)


def inner_kernel(function: Callable[..., Any]) -> Any:
    """Compile a function that only kernels call: once for each of these, without code of its own.

    It goes without the wrappers that unpack Python's arguments, which take longer to compile than most
    bodies.  To call it in a test, compile ``kernel(inner.py_func)``.
    """
    return njit(error_model="numpy", pipeline_class=_InnerCompiler, **WITHOUT_WRAPPERS)(function)


class _Flags(Flags):
    """Flags whose hash is kept while nothing changes: numba takes it for every operator that it types."""

    def __init__(self, copy_from: Flags | None = None) -> None:
        super().__init__(copy_from)
        self._hashed: dict[str, Any] | None = None
        self._hash = 0

    def __hash__(self) -> int:
        if self._values != self._hashed:
            self._hash, self._hashed = super().__hash__(), dict(self._values)
        return self._hash

    def __eq__(self, other: object) -> bool:
        if type(other) is _Flags and self._values == other._values:
            return True
        return bool(super().__eq__(other))


class _Remembering:
    """A typing context that types an operator or a function of numba's once for each types of arguments.

    Numba tries ten to twenty templates at every ``a * b``, which is a fifth of its Python work.
    """

    found: dict[tuple[Any, ...], Any] = {}  # noqa: RUF012  (one memory for all)

    def __init__(self, context: Any) -> None:
        self._context = context

    def __getattr__(self, name: str) -> Any:
        return getattr(self._context, name)

    def resolve_function_type(self, function: Any, arguments: Any, named: Any) -> Any:
        """The signature of a call."""
        if named or isinstance(function, types.Dispatcher | types.BoundFunction):
            return self._context.resolve_function_type(function, arguments, named)
        key = (function, arguments, ConfigStack.top_or_none())
        if key not in self.found:
            signature = self._context.resolve_function_type(function, arguments, named)
            if signature is None:
                return None
            self.found[key] = signature
        return self.found[key]


@register_pass(mutates_CFG=True, analysis_only=False)
class _TypeInference(typed_passes.NopythonTypeInference):
    """Numba's own, with a memory."""

    _name = "type_inference_with_a_memory"

    def run_pass(self, state: Any) -> bool:
        context = state.typingctx
        state.typingctx = _Remembering(context)
        try:
            return bool(super().run_pass(state))
        finally:
            state.typingctx = context


# Left out, as kernels have nothing for them to do and each takes its time: closures and comprehensions,
# with-blocks, raised values, inlining before types are known, unrolling over types, dead branches of
# arguments that are None, and array expressions (write loops).
_PASSES = (
    untyped_passes.TranslateByteCode,
    untyped_passes.FixupArgs,
    untyped_passes.IRProcessing,
    untyped_passes.GenericRewrites,
    untyped_passes.ReconstructSSA,
    _TypeInference,
    typed_passes.PreLowerStripPhis,
    typed_passes.IRLegalization,
    typed_passes.AnnotateTypes,
    typed_passes.NativeLowering,
    typed_passes.NoPythonBackend,
)


class _KernelCompiler(Compiler):
    """Numba's compiler with the passes that kernels need."""

    def __init__(self, *settings: Any, **named: Any) -> None:
        super().__init__(*settings, **named)
        self.state.flags = _Flags(self.state.flags)

    def define_pipelines(self) -> list[PassManager]:
        passes = PassManager("kernels")
        for one in _PASSES:
            passes.add_pass(one, one.__name__)
        passes.finalize()
        return [passes]


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


class _InnerCompiler(_KernelCompiler):
    def define_pipelines(self) -> list[PassManager]:
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
