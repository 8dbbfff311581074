"""What a user says of another kind of thing than the one at hand changes nothing, so it is refused."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

from volmap.carry import CarrySettings
from volmap.io.reading import Reading, VolumeKind
from volmap.types import (
    ImageVolume,
    LabelVolume,
    Measurements,
    MeshFields,
    Polylines,
    TensorVolume,
    UnsaidError,
    VectorVolume,
)

_COMPONENTS = (VectorVolume, TensorVolume)
_NUMBERS = (ImageVolume, *_COMPONENTS)
_VOLUMES = (LabelVolume, *_NUMBERS)


def require_effect(
    thing: Any,
    *,
    name: str,
    kind: VolumeKind,
    settings: CarrySettings,
    reading: Reading,
    onto: Path | None,
    frame_uid: str | None = None,
) -> None:
    """Refuse what has no effect on this kind of thing: whoever says it expects one.

    Parameters
    ----------
    thing : noun
        As it was read.
    name : str
        Of its file.
    kind, settings, reading, onto, frame_uid
        As in `carrying.carry_file`.

    Raises
    ------
    UnsaidError
    """
    for option, nouns, of_what in _said(kind, settings, reading, onto, frame_uid):
        if not isinstance(thing, nouns):
            raise _without_effect(option, f"is for {of_what}", name)
    rule = settings.rules.of_all
    if (
        rule is not None
        and not isinstance(thing, _NUMBERS)
        and all(q.rule is not rule for q in _numbers(thing))
    ):
        raise _without_effect(f"--rule {rule.value}", "fits none of its numbers", name)


def _said(
    kind: VolumeKind, settings: CarrySettings, reading: Reading, onto: Path | None, frame_uid: str | None
) -> Iterator[tuple[str, type | tuple[type, ...], str]]:
    """Each option that was given, the nouns it has an effect on, and these in words."""
    if kind != "either":
        yield f"--as {kind}", _VOLUMES, "volumes"
    if onto is not None:
        yield f"--onto {onto.name}", _VOLUMES, "volumes"
    if reading.axes is not None:
        yield f"--axes {reading.axes}", _COMPONENTS, "vectors and tensors (say --as vectors or --as tensors)"
    if reading.frame is not None:
        yield f"--frame {reading.frame}", (LabelVolume, ImageVolume), "labels and images"
    if reading.threshold is not None:
        yield f"--threshold {reading.threshold:g}", LabelVolume, "label volumes"
    if reading.names is not None:
        yield f"--names {reading.names.name}", LabelVolume, "label volumes"
    if settings.labels is not None:
        yield f"--labels {settings.labels}", LabelVolume, "label volumes"
    if settings.image is not None:
        yield f"--image {settings.image}", _NUMBERS, "images, vectors and tensors on voxels"
    if not settings.bends:
        yield "--vertices-only", Polylines, "lines"
    if frame_uid is not None:
        yield "--frame-uid", LabelVolume, "labels written as DICOM"


def _numbers(thing: Any) -> tuple[Any, ...]:
    """The quantities that follow rules of their own."""
    if isinstance(thing, Measurements):
        return tuple(thing.quantities)
    return (*thing.at_points, *thing.at_cells) if isinstance(thing, MeshFields) else ()


def _without_effect(option: str, why: str, name: str) -> UnsaidError:
    return UnsaidError(f"{option} has no effect on it, for it {why}", where=name, remedy="leave it out")
