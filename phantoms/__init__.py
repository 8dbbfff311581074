"""Gel phantoms: synthetic serial scans whose truth is known.

The scenario is a laboratory that casts gel bodies and scans them in a test rig at several load steps.
Truth comes from a simulated physical deformation or a closed form, by code that shares nothing with
the program it tests: of volmap only the nouns in `volmap.types` are used.
"""

from pathlib import Path
from typing import TYPE_CHECKING

from .catalogue import make, names

if TYPE_CHECKING:
    from .phantom import Phantom

__all__ = ["make", "names", "write"]


def write(phantom: "Phantom", folder: Path) -> Path:
    """Write every file of a phantom into a new folder, whole or not at all; see `writer.write`."""
    from . import writer

    return writer.write(phantom, folder)
