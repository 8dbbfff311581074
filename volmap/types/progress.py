"""How long work tells where it is."""

from __future__ import annotations

from typing import Protocol


class Progress(Protocol):
    """Called now and then by long work; may raise KeyboardInterrupt to stop it."""

    def __call__(self, stage: str, step: int, total: int, note: str = "") -> None:
        """Report `step` of `total` (0 when unknown) of `stage`, with a short note."""


def silent(stage: str, step: int, total: int, note: str = "") -> None:
    """Progress that nobody listens to."""
