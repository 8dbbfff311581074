"""What is wrong with how a command was called: exit status 2."""

from __future__ import annotations

import argparse
import math
from collections.abc import Callable


class UsageError(Exception):
    """Options that do not go together, or name nothing; the sentence says what would be right."""


def positive_number(text: str, *, what: str = "a number above 0") -> float:
    """A number above 0, for argparse.

    Raises
    ------
    argparse.ArgumentTypeError
        No number, not finite, or not above 0.
    """
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not 0.0 < value < math.inf:
        raise argparse.ArgumentTypeError(f"{text!r} is not {what}")
    return value


def positive_mm(text: str) -> float:
    """A length above 0, for argparse; raises as `positive_number`."""
    return positive_number(text, what="a length above 0 mm")


def whole_number(least: int) -> Callable[[str], int]:
    """A reader of whole numbers from `least` up, for argparse."""

    def read(text: str) -> int:
        if not text.isdecimal() or int(text) < least:
            raise argparse.ArgumentTypeError(f"{text!r} is not a whole number from {least} up")
        return int(text)

    return read


def uid(text: str) -> str:
    """A unique identifier of DICOM, for argparse.

    Raises
    ------
    argparse.ArgumentTypeError
        Not numbers between dots.
    """
    from volmap.io.dicom.uids import required_uid
    from volmap.types import InputError

    try:
        return required_uid(text)
    except InputError as fault:
        raise argparse.ArgumentTypeError(fault.sentence) from fault
