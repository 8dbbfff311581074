"""The gate table: limits, their units and where they come from."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from importlib.resources import files
from pathlib import Path
from typing import Any

from volmap.types.errors import InputError

SCHEMA = "volmap-gates/1"

# Which statistics each gate measures; a limit names one of them, with "_above" or "_below".
STATISTICS: Mapping[str, tuple[str, ...]] = {
    "inverted_tets": ("count",),
    "boundary_crossings": ("count",),
    "boundary_distance_mm": ("mean", "p95", "max"),
    "overlap": ("shell",),
    "volume_ratio": ("min", "p0_1", "p99_9", "max"),
    "round_trip_mm": ("mean", "p95", "max"),
    "order_difference_mm": ("mean", "p95", "max", "alone_mean", "alone_p95", "alone_max"),
    "field_folds": ("count", "share"),
    "check_points_mm": ("mean", "p95", "max"),
    "labels_agree": ("labels", "topology"),
    "given_boundary_mm": ("mean", "p95", "max", "excess"),
    "solve_settled": ("unreached", "unfinished"),
}
_IN_MM = (
    "boundary_distance_mm",
    "overlap",
    "round_trip_mm",
    "order_difference_mm",
    "check_points_mm",
    "given_boundary_mm",
)
_LEVELS = ("warn", "fail", "warn_voxel", "fail_voxel")


@dataclass(frozen=True)
class Limit:
    """The limits of one gate.

    Parameters
    ----------
    name, unit, source : str
    warn, fail : mapping of str to float
        ``statistic_above`` or ``statistic_below`` to a limit in the gate's unit (mm for ``shell``).
    warn_voxel, fail_voxel : mapping of str to float
        The same in voxels.
    """

    name: str
    unit: str
    source: str
    warn: Mapping[str, float]
    fail: Mapping[str, float]
    warn_voxel: Mapping[str, float]
    fail_voxel: Mapping[str, float]

    @property
    def unit_of_limits(self) -> str:
        """The unit the limits are in: mm for every gate about a length, the gate's own for the others."""
        return "mm" if self.name in _IN_MM else self.unit

    def warns_at(self, voxel_mm: float) -> dict[str, float]:
        """The limits that warn, in the gate's unit, where a voxel is that long."""
        return dict(self.warn) | {k: v * voxel_mm for k, v in self.warn_voxel.items()}

    def fails_at(self, voxel_mm: float) -> dict[str, float]:
        """The limits that fail, in the gate's unit, where a voxel is that long."""
        return dict(self.fail) | {k: v * voxel_mm for k, v in self.fail_voxel.items()}


@dataclass(frozen=True)
class GateTable:
    """Limits of all gates.

    Parameters
    ----------
    name : str
    limits : mapping of gate name to Limit
    """

    name: str
    limits: Mapping[str, Limit]

    def __getitem__(self, name: str) -> Limit:
        return self.limits[name]


def read_gate_table(path: str | Path | None = None) -> GateTable:
    """The project's gate table, or a user's own in the same form.

    Parameters
    ----------
    path : path, optional
        A TOML file; None for the project's own.

    Raises
    ------
    InputError
        Not readable, not TOML, a gate missing, unknown or without a source, a limit that is not a
        number or names no statistic of the gate.
    """
    where = "gates.toml" if path is None else Path(path).name
    try:
        document = tomllib.loads(_text(path))
    except (OSError, UnicodeDecodeError) as fault:
        reason = str(fault.strerror).lower() if isinstance(fault, OSError) else "no UTF-8 text"
        raise InputError(
            "the gate table cannot be read",
            where=where,
            found=reason,
            expected="a TOML file",
            remedy="check the name; start from a copy of the project's gates.toml",
        ) from fault
    except tomllib.TOMLDecodeError as fault:
        raise InputError(
            "the gate table is not TOML",
            where=where,
            found=str(fault),
            expected="a TOML file",
            remedy="start from a copy of the project's gates.toml",
        ) from fault
    if document.get("schema") != SCHEMA:
        raise InputError(
            "the gate table has another schema",
            where=where,
            found=repr(document.get("schema")),
            expected=SCHEMA,
            remedy="start from a copy of the project's gates.toml",
        )
    gates = document.get("gate", {})
    if not isinstance(gates, dict) or set(gates) != set(STATISTICS):
        raise InputError(
            "the gate table does not have every gate exactly once",
            where=where,
            found=_difference(set(gates) if isinstance(gates, dict) else set()),
            expected=", ".join(STATISTICS),
            remedy="copy the project's gates.toml and change its numbers only",
        )
    limits = {name: _limit(name, gates[name], f"{where}, gate.{name}") for name in STATISTICS}
    return GateTable(str(document.get("name", where)), limits)


def _text(path: str | Path | None) -> str:
    if path is None:
        return files("volmap_shared").joinpath("gates.toml").read_text(encoding="utf-8")
    return Path(path).read_text(encoding="utf-8")


def _difference(found: set[str]) -> str:
    missing = [name for name in STATISTICS if name not in found]
    unknown = sorted(found - set(STATISTICS))
    return f"missing {', '.join(missing) or 'none'}; unknown {', '.join(unknown) or 'none'}"


def _limit(name: str, entry: Any, where: str) -> Limit:
    if not isinstance(entry, dict):
        raise InputError("a gate is not a table", where=where, found=type(entry).__name__)
    unknown = sorted(set(entry) - {"unit", "source", *_LEVELS})
    if unknown:
        raise InputError("a gate has unknown keys", where=where, found=", ".join(unknown))
    for key in ("unit", "source"):
        if not isinstance(entry.get(key), str) or not entry[key].strip():
            raise InputError(f"a gate does not say its {key}", where=where, expected=f"{key} = text")
    levels = {level: _numbers(name, entry.get(level, {}), f"{where}.{level}") for level in _LEVELS}
    for level in ("warn", "fail"):
        both = sorted(set(levels[level]) & set(levels[f"{level}_voxel"]))
        if both:
            raise InputError("a limit is given in two units", where=where, found=", ".join(both))
    return Limit(name, entry["unit"], entry["source"], **levels)


def _numbers(name: str, limits: Any, where: str) -> dict[str, float]:
    if not isinstance(limits, dict):
        raise InputError("limits are not a table", where=where, found=type(limits).__name__)
    if limits and where.endswith("_voxel") and name not in _IN_MM:
        raise InputError("a limit in voxels for a gate that is not a length", where=where)
    wanted = {f"{s}_{side}" for s in STATISTICS[name] for side in ("above", "below")}
    for key, value in limits.items():
        if key not in wanted:
            raise InputError(
                "a limit names no statistic of its gate",
                where=where,
                found=key,
                expected=", ".join(sorted(wanted)),
            )
        if isinstance(value, bool) or not isinstance(value, int | float) or not abs(value) < float("inf"):
            raise InputError("a limit is not a number", where=f"{where}.{key}", found=repr(value))
    return {key: float(value) for key, value in limits.items()}
