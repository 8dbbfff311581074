"""What makes a noun immutable: owned, read-only arrays that survive pickling."""

from __future__ import annotations

from dataclasses import fields
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, DTypeLike, NDArray

from volmap.types.errors import InputError


def owned(values: ArrayLike, dtype: DTypeLike, shape: tuple[int | None, ...], name: str) -> NDArray[Any]:
    """A read-only copy of `values` with the wanted type and shape.

    An array that is read-only already, owns its memory and is of that kind is taken as it is: whoever made
    it gave it away.

    Parameters
    ----------
    values : array_like
    dtype : dtype
    shape : tuple
        Wanted shape; None stands for any length.
    name : str
        What the array is called in an error.

    Raises
    ------
    InputError
        When the shape does not fit.
    """
    array = np.array(values, dtype=dtype, order="C", copy=not _given_away(values, dtype))
    if array.ndim != len(shape) or any(
        w is not None and w != n for w, n in zip(shape, array.shape, strict=True)
    ):
        wanted = "(" + ", ".join("n" if w is None else str(w) for w in shape) + ")"
        raise InputError("an array has the wrong shape", where=name, found=str(array.shape), expected=wanted)
    array.setflags(write=False)
    return array


def _given_away(values: ArrayLike, dtype: DTypeLike) -> bool:
    if type(values) is not np.ndarray or values.dtype != dtype:
        return False
    return bool(values.flags.owndata and values.flags.c_contiguous and not values.flags.writeable)


class Frozen:
    """Base of the nouns: pickles through the constructor, so that checks and read-only arrays hold."""

    def __reduce__(self) -> tuple[Any, ...]:
        values = {f.name: getattr(self, f.name) for f in fields(self) if f.init}  # type: ignore[arg-type]
        return _rebuild, (type(self), values)

    def _own(self, name: str, dtype: DTypeLike, shape: tuple[int | None, ...]) -> NDArray[Any]:
        array = owned(getattr(self, name), dtype, shape, f"{type(self).__name__}.{name}")
        object.__setattr__(self, name, array)
        return array


def _rebuild(kind: type, values: dict[str, Any]) -> Any:
    return kind(**values)


def require_finite(array: NDArray[Any], name: str) -> None:
    """Refuse NaN and infinity.

    Raises
    ------
    InputError
    """
    if not np.isfinite(array).all():
        raise InputError("an array holds values that are not finite", where=name, expected="finite numbers")
