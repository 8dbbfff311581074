"""The same work on both scans of a pair, at once where there are threads for it."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from threading import Event, Lock
from typing import TypeVar

from volmap.types import LabelVolume, Progress

Made = TypeVar("Made")
Work = Callable[[LabelVolume, Progress], Made]
SIDES = ("source", "target")


class _StoppedError(Exception):
    """The other scan's work has failed or was interrupted: nobody waits for this one."""


def on_both(
    work: Work[Made], volumes: tuple[LabelVolume, LabelVolume], progress: Progress, *, n_threads: int
) -> list[Made]:
    """What `work` makes of the source and of the target; the same whether done at once or in turn.

    Parameters
    ----------
    work : callable
        Given a volume and a progress callback.  It may use kernels on `threads.on_threads`, but none with
        parallel loops of numba's own, whose threads serve one caller at a time.
    volumes : (source, target)
    progress : Progress
        Called by one thread at a time, with the stage and the side.
    n_threads : int
        With one, the target waits for the source.
    """
    if n_threads == 1:
        return [work(v, _of_side(progress, side)) for v, side in zip(volumes, SIDES, strict=True)]
    stop, lock = Event(), Lock()

    def told(stage: str, step: int, total: int, note: str = "") -> None:
        if stop.is_set():
            raise _StoppedError
        with lock:
            progress(stage, step, total, note)

    with ThreadPoolExecutor(1) as other:
        target = other.submit(work, volumes[1], _of_side(told, SIDES[1]))
        try:
            source = work(volumes[0], _of_side(told, SIDES[0]))
        except BaseException:
            stop.set()
            raise
        return [source, target.result()]


def _of_side(progress: Progress, side: str) -> Progress:
    def told(stage: str, step: int, total: int, note: str = "") -> None:
        progress(f"{stage} {side}", step, total, note)

    return told
