"""The verb: one thing, carried through a map."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import singledispatch
from typing import Any

import numpy as np

from volmap.carry.intensity_volumes import pull_image, pull_tensors, pull_vectors
from volmap.carry.label_volumes import LABEL_SENTENCES, label_shares, pull_labels
from volmap.carry.outside import outside_findings
from volmap.carry.points import MovedPoints, move_points
from volmap.carry.settings import AS_USUAL, CarrySettings
from volmap.carry.splines import IMAGE_SENTENCES
from volmap.types import (
    Finding,
    Grid,
    ImageVolume,
    InputError,
    LabelVolume,
    Landmarks,
    Level,
    MapChain,
    Rule,
    TensorVolume,
    UnsaidError,
    VectorVolume,
    VolumeMap,
)
from volmap.types.quantities import require_rule, rules_of_rank


@dataclass(frozen=True)
class Carried:
    """A thing in its new place, and what was seen on the way.

    Parameters
    ----------
    thing : noun
        Of the same kind as what was carried.
    findings : tuple of Finding
    facts : mapping of str to plain values
        What was done to numbers and lengths, for the document beside the output.
    """

    thing: Any
    findings: tuple[Finding, ...] = ()
    facts: Mapping[str, Any] = field(default_factory=dict)


@singledispatch
def carry(
    thing: Any,
    volume_map: VolumeMap | MapChain,
    *,
    reverse: bool = False,
    onto: Grid | None = None,
    settings: CarrySettings = AS_USUAL,
) -> Carried:
    """Carry a thing from SOURCE to TARGET, or back.

    Parameters
    ----------
    thing : Landmarks, Measurements, Polylines, LabelVolume, ImageVolume, TetMesh, Surface or MeshFields
        In SOURCE's world (in TARGET's with `reverse`).
        Points of landmarks, measurements, lines, meshes and surfaces move exactly (see
        `points.move_points`), the numbers of quantities by their own rules (`types.Rule`).  Volumes are
        pulled: each voxel centre of `onto` inside the body is sent back by the exact inverse, and takes the
        label of the voxel it falls in, or the trilinear intensity there.
    volume_map : VolumeMap or MapChain
    reverse : bool
        From TARGET to SOURCE, by the exact inverse.
    onto : Grid
        Where a volume goes: a grid of TARGET (of SOURCE with `reverse`).  Needed by volumes, not used
        by the rest.
    settings : CarrySettings

    Returns
    -------
    Carried

    Raises
    ------
    InputError
        A kind of thing that cannot be carried, no `onto` for a volume, a volume or a mesh that does not lie
        on the body.
    """
    raise InputError(
        "this kind of thing cannot be carried",
        found=type(thing).__name__,
        expected="Landmarks, LabelVolume, ImageVolume, TetMesh or Surface",
    )


@carry.register
def _carry_landmarks(
    thing: Landmarks,
    volume_map: VolumeMap,
    *,
    reverse: bool = False,
    onto: Grid | None = None,
    settings: CarrySettings = AS_USUAL,
) -> Carried:
    moved = move_points(_directed(volume_map, reverse), thing.points, reach_mm=settings.reach)
    kept = np.flatnonzero(moved.carried)
    landmarks = Landmarks(
        tuple(thing.names[i] for i in kept), moved.points[kept], tuple(thing.roles[i] for i in kept)
    )
    return Carried(landmarks, _landmark_findings(thing, moved))


@carry.register
def _carry_labels(
    thing: LabelVolume,
    volume_map: VolumeMap,
    *,
    reverse: bool = False,
    onto: Grid | None = None,
    settings: CarrySettings = AS_USUAL,
) -> Carried:
    directed, onto = _directed(volume_map, reverse), _required(onto, thing.name)
    facts = {"labels": LABEL_SENTENCES[settings.label_mode]}
    if settings.label_mode == "shares":
        return Carried(*label_shares(thing, directed, onto), facts)
    labels = pull_labels(thing, directed, onto, mode=settings.label_mode, reach_mm=settings.reach)
    return Carried(*labels, facts)


@carry.register
def _carry_image(
    thing: ImageVolume,
    volume_map: VolumeMap,
    *,
    reverse: bool = False,
    onto: Grid | None = None,
    settings: CarrySettings = AS_USUAL,
) -> Carried:
    directed, onto = _directed(volume_map, reverse), _required(onto, thing.name)
    rule = require_rule(settings.rules.of_all or Rule.VALUE, 0, thing.name)
    image = pull_image(thing, directed, onto, mode=settings.image_mode, rule=rule, reach_mm=settings.reach)
    return Carried(*image, _numbers(rule, 0, settings.image_mode, thing.unit))


@carry.register
def _carry_vectors(
    thing: VectorVolume,
    volume_map: VolumeMap,
    *,
    reverse: bool = False,
    onto: Grid | None = None,
    settings: CarrySettings = AS_USUAL,
) -> Carried:
    directed, onto = _directed(volume_map, reverse), _required(onto, thing.name)
    rule = _stated(settings.rules.of_all, thing.name, 1)
    moved = pull_vectors(thing, directed, onto, mode=settings.image_mode, rule=rule, reach_mm=settings.reach)
    return Carried(*moved, _numbers(rule, 1, settings.image_mode, thing.unit))


@carry.register
def _carry_tensors(
    thing: TensorVolume,
    volume_map: VolumeMap,
    *,
    reverse: bool = False,
    onto: Grid | None = None,
    settings: CarrySettings = AS_USUAL,
) -> Carried:
    directed, onto = _directed(volume_map, reverse), _required(onto, thing.name)
    rule = _stated(settings.rules.of_all, thing.name, 2)
    moved = pull_tensors(thing, directed, onto, mode=settings.image_mode, rule=rule, reach_mm=settings.reach)
    return Carried(*moved, _numbers(rule, 2, settings.image_mode, thing.unit))


def _directed(volume_map: VolumeMap, reverse: bool) -> VolumeMap:
    return volume_map.reversed() if reverse else volume_map


def _required(onto: Grid | None, where: str) -> Grid:
    if onto is None:
        raise InputError(
            "a volume needs a grid to be carried onto",
            where=where,
            remedy="name a scan of the space the volume goes to",
        )
    return onto


def _numbers(rule: Rule, rank: int, mode: str, unit: str) -> dict[str, str]:
    """What was done to the numbers of a volume."""
    unit = unit or "as in the file that was carried, which does not say"
    return {
        "interpolation": f"{IMAGE_SENTENCES[mode]}, at the exact preimage of each voxel centre",
        "numbers": f"{rule.value}: {rule.sentence(rank)}",
        "unit_of_numbers": unit,
        "not_defined": "NaN: outside the carried body, beyond the volume, or beside a NaN in it",
    }


def _stated(rule: Rule | None, where: str, rank: int) -> Rule:
    """Vectors and tensors change when they are carried: how is for the user to say."""
    if rule is None:
        raise UnsaidError(
            "needs a rule to be carried by",
            where=where,
            expected=" or ".join(r.value for r in rules_of_rank(rank)),
            remedy="say for instance --rule turn, which keeps lengths and eigenvalues",
        )
    return require_rule(rule, rank, where)


def _landmark_findings(thing: Landmarks, moved: MovedPoints) -> tuple[Finding, ...]:
    """Who was outside, how far, and what stayed behind."""
    findings = outside_findings(moved, thing.names, "landmarks")
    if thing.sd_mm is not None:
        sentence = (
            "sd_mm tells how well the points were placed in their own scan; it was not carried with them"
        )
        findings += (Finding(Level.NOTE, "sd-left-out", "landmarks", sentence),)
    return findings
