"""JSON documents: strict, deterministic, safe for numpy values."""

from __future__ import annotations

import json
import math
import os
from collections.abc import Mapping
from enum import Enum
from typing import Any

import numpy as np

from volmap.io.atomic import whole_file
from volmap.io.opening import all_text, shown_name
from volmap.types.errors import InputError


def plain(value: Any) -> Any:
    """The value in JSON's own types; numbers that are not finite become None.

    Raises
    ------
    TypeError
        For anything JSON has no word for (a path, for instance: no path may leave the program).
    """
    if isinstance(value, Enum):
        return plain(value.value)
    if isinstance(value, np.ndarray | np.generic):
        return plain(value.tolist())
    if value is None or isinstance(value, bool | int | str):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(plain(k)): plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [plain(v) for v in value]
    raise TypeError(f"JSON has no word for {type(value).__name__}")


def json_text(document: Any, *, sort: bool = False) -> str:
    """The document as text: given order unless `sort`, two spaces deep, newline at the end."""
    return json.dumps(plain(document), indent=2, sort_keys=sort, ensure_ascii=False, allow_nan=False) + "\n"


def write_json(
    path: str | os.PathLike[str], document: Any, *, sort: bool = False, overwrite: bool = False
) -> None:
    """Write a document whole or not at all.

    Raises
    ------
    InputError
        As `whole_file`.
    """
    text = json_text(document, sort=sort)
    with whole_file(path, overwrite=overwrite) as temporary:
        temporary.write_bytes(text.encode("utf-8", "replace"))


def read_json(path: str | os.PathLike[str]) -> dict[str, Any]:
    """Read a document whose top level is an object.

    Raises
    ------
    InputError
        Not JSON, NaN or Infinity in it, a key twice, or no object at the top.
    """
    where = shown_name(path)
    try:
        document = json.loads(all_text(path), parse_constant=_no_constant, object_pairs_hook=_once)
    except json.JSONDecodeError as fault:
        raise InputError(
            "the file is not JSON", where=f"{where}, line {fault.lineno}", found=fault.msg.lower()
        ) from fault
    except InputError as fault:
        raise fault if fault.where else fault.at(where)  # noqa: B904
    except (ValueError, RecursionError) as fault:
        raise InputError("the file is not JSON that can be used", where=where) from fault
    if not isinstance(document, dict):
        raise InputError("the file is not one JSON object", where=where, found=type(document).__name__)
    return document


def _no_constant(word: str) -> None:
    raise InputError("a number is not finite", found=word, expected="null")


def _once(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    document = dict(pairs)
    if len(document) < len(pairs):
        keys = [k for k, _ in pairs]
        twice = next(k for k in keys if keys.count(k) > 1)
        raise InputError("a key stands twice in one object", found=repr(twice))
    return document
