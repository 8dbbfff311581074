"""Threads, memory, time and versions of a run."""

from __future__ import annotations

import importlib.metadata
import platform
import resource
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager

from volmap.kernels.first_use import compile_on_all_cores, not_compiled_yet
from volmap.types import InputError, Progress

PACKAGES = ("volmap", "numpy", "scipy", "numba", "scikit-image", "nibabel", "vtk")


def compile_at_first_use(progress: Progress, *stages: str) -> None:
    """Compile what 'mesh' and 'map' need, on all cores, where this machine has not done so; say so."""
    missing = not_compiled_yet(stages)
    if missing:
        progress("compile", 0, 0, "compiling the kernels, once per machine (about half a minute)")
        compile_on_all_cores(missing)


class Stopwatch:
    """Seconds by stage."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}

    @contextmanager
    def measuring(self, stage: str) -> Iterator[None]:
        """Add the time of a block to a stage."""
        begin = time.perf_counter()
        try:
            yield
        finally:
            spent = time.perf_counter() - begin
            self.seconds[stage] = round(self.seconds.get(stage, 0.0) + spent, 3)


def use_threads(threads: int | None) -> int:
    """Set the number of threads of all kernels; returns the number in use.

    Raises
    ------
    InputError
        More threads than the machine lets the program use, or fewer than one.
    """
    import numba

    most = int(numba.config.NUMBA_NUM_THREADS)  # type: ignore[attr-defined]
    if threads is not None:
        if not 1 <= threads <= most:
            raise InputError(
                "this number of threads cannot be had",
                where="--threads",
                found=str(threads),
                expected=f"1 to {most}",
            )
        numba.set_num_threads(threads)
    return int(numba.get_num_threads())


def peak_mb() -> float:
    """Largest resident memory of this process so far, MB."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return round(peak / (1024.0 if sys.platform != "darwin" else 1024.0**2), 1)


def versions() -> dict[str, str]:
    """Versions of the program and of what its numbers depend on."""
    found = {name: importlib.metadata.version(name) for name in PACKAGES}
    return found | {"python": platform.python_version()}
