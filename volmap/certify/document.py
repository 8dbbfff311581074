"""A certificate as a document, and back."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from volmap.types.certificate import Certificate, Gate, Verdict
from volmap.types.errors import InputError
from volmap.types.notice import caution

SCHEMA = "volmap-certificate/1"
_MAPPINGS = ("source", "target", "settings", "versions", "mesh", "measures", "seconds")
_KEYS = ("schema", "notice", *_MAPPINGS, "gates", "peak_mb", "status", "notes", "verdict")
_GATE_KEYS = ("name", "value", "unit", "warn", "fail", "limit_source", "verdict", "where", "sentence")


def as_document(certificate: Certificate) -> dict[str, Any]:
    """The certificate as plain values, ready for JSON.

    Numbers that are not finite become null: JSON has none.
    """
    c = certificate
    document = {
        "schema": SCHEMA,
        "notice": caution(),
        "verdict": c.verdict.value,
        "status": c.status,
        "source": c.source,
        "target": c.target,
        "settings": c.settings,
        "versions": c.versions,
        "mesh": c.mesh,
        "gates": [gate.as_dict() for gate in c.gates],
        "measures": c.measures,
        "seconds": c.seconds,
        "peak_mb": c.peak_mb,
        "notes": list(c.notes),
    }
    return {key: plain(value) for key, value in document.items()}


def plain(value: Any) -> Any:
    """Nested values as JSON knows them: string keys, Python numbers, lists; not finite becomes None.

    Raises
    ------
    TypeError
        A value JSON has no word for.
    """
    if isinstance(value, Mapping):
        return {str(k): plain(v) for k, v in value.items()}
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, str) or value is None:
        return None if value is None else str(value)
    if isinstance(value, bool | np.bool_):
        return bool(value)
    if isinstance(value, int | np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, Sequence):
        return [plain(v) for v in value]
    raise TypeError(f"a certificate cannot hold a {type(value).__name__}")


def from_document(document: Any, *, where: str = "certificate.json") -> Certificate:
    """The certificate a document holds.

    Parameters
    ----------
    document : JSON value
    where : str
        File name for errors.

    Raises
    ------
    InputError
        Not a certificate of this schema: a key missing, unknown or of the wrong kind, a gate twice, a
        verdict that does not follow from the gates.
    """
    _require_keys(document, _KEYS, where)
    if document["schema"] != SCHEMA:
        raise InputError("another schema", where=where, found=repr(document["schema"]), expected=SCHEMA)
    for key in _MAPPINGS:
        _require(isinstance(document[key], dict), f"{key} is not an object", where)
    _require(isinstance(document["gates"], list), "gates is not a list", where)
    _require(_is_number(document["peak_mb"]), "peak_mb is not a number", where)
    _require(all(_is_number(s) for s in document["seconds"].values()), "seconds are not numbers", where)
    _require(isinstance(document["notes"], list), "notes is not a list", where)
    gates = tuple(_gate(entry, f"{where}, gate {i}") for i, entry in enumerate(document["gates"]))
    names = [gate.name for gate in gates]
    _require(len(set(names)) == len(names), "a gate occurs twice", where)
    certificate = Certificate(
        gates=gates,
        peak_mb=float(document["peak_mb"]),
        status=str(document["status"]),
        notes=tuple(str(n) for n in document["notes"]),
        **{key: document[key] for key in _MAPPINGS},
    )
    if document["verdict"] != certificate.verdict.value:
        raise InputError(
            "the verdict does not follow from the gates",
            where=where,
            found=repr(document["verdict"]),
            expected=certificate.verdict.value,
            remedy="the file was changed by hand; make it again from the map",
            refused=True,
        )
    return certificate


def _gate(entry: Any, where: str) -> Gate:
    _require_keys(entry, _GATE_KEYS, where)
    for key in ("name", "unit", "limit_source", "sentence"):
        _require(isinstance(entry[key], str), f"{key} is not text", where)
    _require(isinstance(entry["where"], list), "where is not a list", where)
    _require(all(isinstance(p, dict) for p in entry["where"]), "a place is not an object", where)
    if entry["verdict"] not in {v.value for v in Verdict}:
        raise InputError(
            "a verdict is unknown",
            where=where,
            found=repr(entry["verdict"]),
            expected=", ".join(v.value for v in Verdict),
        )
    values = {key: entry[key] for key in _GATE_KEYS}
    return Gate(**values | {"verdict": Verdict(entry["verdict"]), "where": tuple(entry["where"])})


def _require_keys(entry: Any, keys: Sequence[str], where: str) -> None:
    _require(isinstance(entry, dict), "not an object", where)
    missing = [k for k in keys if k not in entry]
    unknown = [k for k in entry if k not in keys]
    if missing or unknown:
        raise InputError(
            "the keys are not those of the schema",
            where=where,
            found=f"missing {', '.join(missing) or 'none'}; unknown {', '.join(map(str, unknown)) or 'none'}",
            expected=SCHEMA,
        )


def _require(holds: bool, what: str, where: str) -> None:
    if not holds:
        raise InputError(what, where=where, expected=SCHEMA)


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool)
