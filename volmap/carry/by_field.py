"""Things carried by a sampled field instead of the map it was sampled from.

A field on the grid of one scan (here) points into another (there): it moves points from here into there,
and resamples volumes of there onto the grid here.  At its voxel centres it is the map, rounded to float32;
between them it is trilinear, which the map is not.  It knows no tets: what needs gradients is not carried.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.carry.measured import quantity_facts
from volmap.carry.sampling import sample_field
from volmap.carry.settings import AS_USUAL, CarrySettings
from volmap.carry.splines import interpolator
from volmap.carry.things import Carried
from volmap.kernels.nearest import likeliest_labels, nearest_labels
from volmap.types import (
    Finding,
    GridField,
    ImageVolume,
    InputError,
    LabelVolume,
    Landmarks,
    Level,
    Measurements,
    MeshFields,
    Quantity,
    Rule,
    Surface,
    TetMesh,
)

Floats = NDArray[np.float64]


def carry_by_field(thing: Any, field: GridField, *, settings: CarrySettings = AS_USUAL) -> Carried:
    """Carry a thing by a field, in the only direction it has for this kind of thing.

    Parameters
    ----------
    thing : Landmarks, Measurements, TetMesh, Surface, MeshFields, LabelVolume or ImageVolume
        Points in the world of the field's grid go into the world it points into.  Volumes in the world it
        points into come onto its grid.
    field : GridField
    settings : CarrySettings
        Labels 'nearest' or 'one-hot'; rules other than 'value' need the map.

    Returns
    -------
    Carried

    Raises
    ------
    InputError
        Another kind of thing, a mode or rule that needs the map, nothing of the thing where the field is
        defined, or a mesh or surface of which a part is not.
    """
    match thing:
        case LabelVolume():
            return _labels(thing, field, settings)
        case ImageVolume():
            if settings.rules.of_all not in (None, Rule.VALUE):
                raise _needs_the_map(f"the rule {settings.rules.of_all.value}", thing.name)
            return _image(thing, field, settings)
        case Landmarks():
            there, kept, findings = _some_points(thing.points, thing.names, field, "landmarks")
            roles = tuple(thing.roles[i] for i in kept)
            return Carried(Landmarks(tuple(thing.names[i] for i in kept), there[kept], roles), findings)
        case Measurements():
            _require_kept(thing.quantities)
            there, kept, findings = _some_points(thing.points, thing.names, field, "measurements")
            measured = replace(thing.rows(kept), points=there[kept])
            return Carried(measured, findings, quantity_facts(thing.quantities))
        case TetMesh():
            return Carried(thing.moved(_all_points(thing.points, field, "mesh")))
        case Surface():
            return Carried(replace(thing, points=_all_points(thing.points, field, "surface")))
        case MeshFields():
            _require_kept((*thing.at_points, *thing.at_cells))
            body = carry_by_field(thing.body, field).thing
            return Carried(
                replace(thing, body=body), facts=quantity_facts((*thing.at_points, *thing.at_cells))
            )
        case _:
            raise _needs_the_map("this kind of thing", type(thing).__name__)


def _require_kept(quantities: tuple[Quantity, ...]) -> None:
    """Refuse numbers that change: how they do depends on the map's gradient."""
    for quantity in quantities:
        if quantity.rule is not Rule.VALUE:
            raise _needs_the_map(f"the rule {quantity.rule.value}", quantity.name)


def _needs_the_map(what: str, where: str) -> InputError:
    return InputError(
        f"{what} needs the exact map, a field is not enough",
        where=where,
        remedy="carry it through the map folder",
        refused=True,
    )


def _places(field: GridField) -> tuple[NDArray[np.bool_], Floats]:
    """Where the field is defined, and the places y = x + u there, (n, 3) mm."""
    known = field.support.astype(bool)
    x = field.grid.to_world(np.argwhere(known).astype(np.float64))
    return known, x + field.displacement[known]


def _labels(volume: LabelVolume, field: GridField, settings: CarrySettings) -> Carried:
    if settings.label_mode == "shares":
        raise _needs_the_map("how much of each voxel a label fills", volume.name)
    known, places = _places(field)
    index = volume.grid.to_index(places)
    labels = np.zeros(field.grid.shape, np.uint16)
    look = likeliest_labels if settings.label_mode == "one-hot" else nearest_labels
    labels[known] = look(volume.labels, index)
    labels.setflags(write=False)
    carried = LabelVolume(field.grid, labels, volume.names, volume.name, volume.codes)
    findings = _covered(volume, index)
    for label in set(volume.present) - set(carried.present):
        sentence = f"{volume.name_of(label)} has no voxel on the new grid"
        findings += (Finding(Level.WARN, "label-lost", volume.name, sentence),)
    return Carried(carried, findings)


def _image(volume: ImageVolume, field: GridField, settings: CarrySettings) -> Carried:
    known, places = _places(field)
    index = volume.grid.to_index(places)
    values = np.full(field.grid.shape, np.nan, np.float32)
    values[known] = interpolator(volume.values[..., None], settings.image_mode)(index)[:, 0]
    values.setflags(write=False)
    return Carried(ImageVolume(field.grid, values, volume.unit, volume.name), _covered(volume, index))


def _covered(volume: LabelVolume | ImageVolume, index: Floats) -> tuple[Finding, ...]:
    """Does the volume hold the places the field asks for?  Refused when it holds none."""
    inside = ((index >= -0.5) & (index <= np.array(volume.grid.shape) - 0.5)).all(axis=1)
    if not inside.any():
        raise InputError(
            "the volume holds no place the field points to",
            where=volume.name,
            remedy="check the direction of the field, and that the volume belongs to the scan it points into",
            refused=True,
        )
    if inside.all():
        return ()
    sentence = f"the volume leaves out {100 * (1 - inside.mean()):.2g} % of the places the field points to"
    return (Finding(Level.WARN, "not-covered", volume.name, sentence),)


def _some_points(
    points: Floats, names: tuple[str, ...], field: GridField, where: str
) -> tuple[Floats, NDArray[np.int64], tuple[Finding, ...]]:
    """Where points go, which of them do, and who does not."""
    u, inside = sample_field(field, points)
    kept, lost = np.flatnonzero(inside), np.flatnonzero(~inside)
    if not len(lost):
        return points + u, kept, ()
    if not len(kept):
        raise _not_defined(f"all {len(lost)} points", where)
    named = ", ".join(names[i] for i in lost[:10]) + (f" and {len(lost) - 10} more" if len(lost) > 10 else "")
    sentence = (
        f"{len(lost)} of {len(names)} points lie where the field is not defined and were not carried: {named}"
    )
    remedy = "within a voxel of the boundary only the map itself has an answer: carry through the map folder"
    return points + u, kept, (Finding(Level.WARN, "outside-left-out", where, sentence, remedy),)


def _all_points(points: Floats, field: GridField, where: str) -> Floats:
    u, inside = sample_field(field, points)
    if not inside.all():
        raise _not_defined(f"{(~inside).sum()} of {len(points)} points", where)
    return np.asarray(points + u)


def _not_defined(which: str, where: str) -> InputError:
    return InputError(
        f"{which} lie where the field is not defined",
        where=where,
        remedy="check the direction of the field; within a voxel of the boundary only the map itself has an "
        "answer: carry through the map folder",
        refused=True,
    )
