"""Values out of a data set, of the kind that was asked for or none.

No value is ever quoted in an error: a damaged field may hold anything, a patient's name too.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError


def value(ds: Any, keyword: str, where: str) -> Any:
    """What stands in a field; None where it is missing or empty.

    Parameters
    ----------
    ds : pydicom.Dataset
    keyword : str
        Of the DICOM dictionary (PS3.6).
    where : str
        File name for the error.

    Raises
    ------
    InputError
        The bytes do not fit the field's type.
    """
    try:
        found = ds.get(keyword)
    except Exception as fault:  # pydicom decodes here, and meets damaged bytes in any way at all
        raise _damaged(keyword, where) from fault
    return None if found is None or (not isinstance(found, int | float) and not len(found)) else found


def text(ds: Any, keyword: str, where: str) -> str:
    """A field as text, its first value if there are several; '' where it is missing.

    Raises
    ------
    InputError
        As `value`.
    """
    found = value(ds, keyword, where)
    if found is None:
        return ""
    if not isinstance(found, str) and hasattr(found, "__getitem__"):
        found = found[0]
    return " ".join("".join(c if c.isprintable() else " " for c in str(found)).split())


def whole(ds: Any, keyword: str, where: str, *, least: int = 0, most: int = 2**31) -> int | None:
    """A field as a whole number from `least` to `most`; None where it is missing.

    Raises
    ------
    InputError
        As `value`, no whole number, or outside the bounds.
    """
    found = reals(ds, keyword, 1, where)
    if found is None:
        return None
    if found[0] != np.rint(found[0]) or not least <= found[0] <= most:
        raise InputError(
            f"its {keyword} is out of bounds", where=where, expected=f"a whole number from {least} to {most}",
            remedy="export it again",
        )  # fmt: skip
    return int(found[0])


def reals(ds: Any, keyword: str, n: int, where: str) -> NDArray[np.float64] | None:
    """A field of `n` finite numbers, (n,) float64; None where it is missing.

    Raises
    ------
    InputError
        As `value`, no numbers, another count, or numbers that are not finite.
    """
    found = value(ds, keyword, where)
    if found is None:
        return None
    try:
        numbers = np.atleast_1d(np.array(found, np.float64))
    except (TypeError, ValueError, OverflowError) as fault:
        raise _damaged(keyword, where) from fault
    if numbers.shape != (n,) or not np.isfinite(numbers).all():
        expected = "a finite number" if n == 1 else f"{n} finite numbers"
        raise InputError(
            f"its {keyword} is nonsense", where=where, found=f"{numbers.size} of which "
            f"{int(np.isfinite(numbers).sum())} finite", expected=expected, remedy="export it again",
        )  # fmt: skip
    return numbers


def items(ds: Any, keyword: str, where: str) -> list[Any]:
    """The items of a sequence field; none where it is missing.

    Raises
    ------
    InputError
        As `value`, or no sequence.
    """
    from pydicom.sequence import Sequence

    found = value(ds, keyword, where)
    if found is None:
        return []
    if not isinstance(found, Sequence):
        raise _damaged(keyword, where)
    return list(found)


def item(ds: Any, keyword: str, where: str) -> Any:
    """The first item of a sequence field, or None.

    Raises
    ------
    InputError
        As `items`.
    """
    return next(iter(items(ds, keyword, where)), None)


def required(found: Any, keyword: str, where: str) -> Any:
    """`found`, unless it is None.

    Raises
    ------
    InputError
        It is None: the field is missing.
    """
    if found is None:
        raise InputError(
            f"has no {keyword}", where=where, remedy="export it again as a standard DICOM object"
        )
    return found


def _damaged(keyword: str, where: str) -> InputError:
    return InputError(
        f"its {keyword} is damaged", where=where, expected="a value of the type DICOM gives it",
        remedy="copy or export it again",
    )  # fmt: skip
