"""The evidence that goes with a map."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from typing import Any


class Verdict(StrEnum):
    """What a gate, or a whole certificate, says."""

    PASS = "pass"
    WARN = "warn"
    FAIL = "fail"
    NOT_ASSESSED = "not-assessed"

    @staticmethod
    def worst(verdicts: list[Verdict]) -> Verdict:
        """The worst of several; gates that were not assessed do not count."""
        order = [Verdict.PASS, Verdict.WARN, Verdict.FAIL]
        ranks = [order.index(v) for v in verdicts if v is not Verdict.NOT_ASSESSED]
        return order[max(ranks)] if ranks else Verdict.NOT_ASSESSED


@dataclass(frozen=True)
class Gate:
    """One check with its limits.

    Parameters
    ----------
    name : str
        As in the gate table ("boundary_distance_mm").
    value : float, dict or None
        What was measured; None when it was not.
    unit : str
    warn, fail : float, list, dict or None
        The limits.
    limit_source : str
    verdict : Verdict
    where : tuple of dict
        Places that speak against the map, each
        ``{"point_mm": [x, y, z], "space": "source" or "target", "note": str}``.
    sentence : str
        What the gate says, in words.
    """

    name: str
    value: Any
    unit: str
    warn: Any
    fail: Any
    limit_source: str
    verdict: Verdict
    where: tuple[dict[str, Any], ...] = ()
    sentence: str = ""

    def as_dict(self) -> dict[str, Any]:
        """Plain values, for JSON, in the contract's order."""
        return {
            "name": self.name,
            "value": self.value,
            "unit": self.unit,
            "warn": self.warn,
            "fail": self.fail,
            "limit_source": self.limit_source,
            "verdict": self.verdict.value,
            "where": list(self.where),
            "sentence": self.sentence,
        }


@dataclass(frozen=True)
class Certificate:
    """All gates of one map, with what they were measured on.

    Parameters
    ----------
    source, target : mapping
        ``{"name", "sha256", "labels": {label: {...}}}``.
    gates : tuple of Gate
    measures : mapping
        p50, p95, max and the like of each measured quantity.
    settings, versions, mesh, seconds : mapping
    peak_mb : float
    status : str
        How the solve ended, as a sentence.
    notes : tuple of str
    """

    source: Mapping[str, Any]
    target: Mapping[str, Any]
    gates: tuple[Gate, ...]
    measures: Mapping[str, Any] = field(default_factory=dict)
    settings: Mapping[str, Any] = field(default_factory=dict)
    versions: Mapping[str, Any] = field(default_factory=dict)
    mesh: Mapping[str, Any] = field(default_factory=dict)
    seconds: Mapping[str, float] = field(default_factory=dict)
    peak_mb: float = 0.0
    status: str = ""
    notes: tuple[str, ...] = ()

    @property
    def verdict(self) -> Verdict:
        """The worst verdict of the gates that were assessed."""
        return Verdict.worst([g.verdict for g in self.gates])

    def gate(self, name: str) -> Gate:
        """The gate of that name.

        Raises
        ------
        KeyError
        """
        for gate in self.gates:
            if gate.name == name:
                return gate
        raise KeyError(name)
