"""Files of a map folder that are not what its own map gives: what no gate looks at."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np

from volmap import carry as carrying
from volmap import certify as certifying
from volmap.mapfolder import CARRIED, MAP, RATIO, STEPS, SURFACES, MapFolder
from volmap.pipeline.told import distortion_of, mesh_document, scan_document, sidecars_of
from volmap.types import Progress, silent

TOLERANCE_MM = 1e-3  # of float32 displacements


def doctored(folder: MapFolder, measures: Mapping[str, Any], *, progress: Progress = silent) -> list[str]:
    """A sentence for each file or number that is not what the map, the scans and the steps give.

    Parameters
    ----------
    folder : MapFolder
        As read.
    measures : mapping
        The certificate's measures, made anew.
    progress : Progress
    """
    looks = {
        "directions": _directions,
        "fields": _fields,
        "volumes": _volumes,
        "surfaces": _surfaces,
        "distortion": _distortion,
        "steps": _steps,
    }
    sentences: list[str] = []
    for i, (what, look) in enumerate(looks.items()):
        progress("compare", i, len(looks) + 1, what)
        sentences += look(folder)
    progress("compare", len(looks), len(looks) + 1, "documents")
    return sentences + [
        f"{where} is stored as {old!r} and recomputed as {new!r}"
        for where, old, new in _words(folder, measures)
    ]


def proofs_of(folder: MapFolder) -> tuple[carrying.DirectionProof, ...]:
    """The check points of both fields, read back from their files and sent through the map."""
    maps = {"forward": folder.map, "backward": folder.map.reversed()}
    return tuple(
        carrying.direction_proof(
            getattr(folder, name), folder.sidecars[name], name=f"{name}.nii.gz", exact=exact
        )
        for name, exact in maps.items()
    )


def _directions(folder: MapFolder) -> Iterator[str]:
    """Check points, and what each sidecar says of its direction and of the scans at both ends."""
    for proof in proofs_of(folder):
        yield from proof.faults
    sides = {"SOURCE": folder.source, "TARGET": folder.target}
    for name, roles in (("forward", ("SOURCE", "TARGET")), ("backward", ("TARGET", "SOURCE"))):
        told = folder.sidecars[name]
        if told.get("direction") != name:
            yield f"{name}.json: says that the field of {name}.nii.gz runs {told.get('direction')!r}"
        for key, role in zip(("grid_space", "points_into"), roles, strict=True):
            said, labels = told.get(key), sides[role]
            said = said if isinstance(said, dict) else {}
            if said.get("role") != role:
                yield f"{name}.json: {key} is said to be {said.get('role')!r}, and is {role} ({labels.name})"
            if said.get("sha256") != labels.sha256:
                yield (
                    f"{name}.json: {key} has the digest {str(said.get('sha256'))[:12]}, and the stored "
                    f"labels of {role} ({labels.name}) have {labels.sha256[:12]}"
                )


def _fields(folder: MapFolder) -> Iterator[str]:
    forward = carrying.forward_field(folder.map, folder.source.grid)
    backward = carrying.backward_field(folder.map, folder.target.grid)
    made = {
        "forward.nii.gz": (folder.forward, forward, backward),
        "backward.nii.gz": (folder.backward, backward, forward),
    }
    for name, (stored, fresh, other) in made.items():
        missing = int((stored.support != fresh.support).sum())
        if missing:
            yield f"{name}: {missing} voxels are defined in only one of the stored field and the map in {MAP}"
        apart = np.abs(stored.displacement - fresh.displacement)
        most = float(np.nanmax(apart, initial=0.0))
        if most > TOLERANCE_MM:
            mistake = carrying.field_mistake(stored, fresh, other)
            yield f"{name}: the stored field is not the map in {MAP} (up to {most:.3g} mm)" + (
                f": {mistake}" if mistake else ""
            )


def _volumes(folder: MapFolder) -> Iterator[str]:
    carried = carrying.carried_solid(folder.map, folder.target.grid)
    differ = int((carried.labels != folder.carried.labels).sum())
    if differ:
        yield f"{CARRIED}: {differ} voxels are not what {MAP} gives"
    ratio = carrying.volume_ratio_image(folder.map, folder.source.grid).values
    far = int((~np.isclose(ratio, folder.volume_ratio.values, rtol=1e-4, equal_nan=True)).sum())
    if far:
        yield f"{RATIO}: {far} voxels are not what {MAP} gives"


def _surfaces(folder: MapFolder) -> Iterator[str]:
    for side, mesh in folder.own_meshes.items():
        stored, own = getattr(folder, f"{side}_surface"), mesh.interfaces
        same = all(
            np.array_equal(getattr(stored, p), getattr(own, p)) for p in ("triangles", "sides", "points")
        )
        if not same:
            yield f"{SURFACES[side]}: not the label surfaces of the {side}'s own mesh"


def _distortion(folder: MapFolder) -> Iterator[str]:
    energy = str(dict(folder.certificate.settings.get("map", {})).get("energy"))
    try:
        fresh = distortion_of(folder.map, energy)
    except KeyError:
        yield f"certificate.json: settings.map.energy is {energy!r}, which is no energy"
        return
    if folder.distortion.shape != fresh.shape or not np.allclose(folder.distortion, fresh, rtol=1e-6):
        yield f"{MAP}: `distortion` is not what its points give"


def _steps(folder: MapFolder) -> Iterator[str]:
    """The last step leaves the map that is stored."""
    if folder.certificate.status != folder.status.value:
        yield f"{STEPS}: the solve ended {folder.status.name}, but the certificate says otherwise"
    if not folder.history:
        yield f"{STEPS}: holds no step"
        return
    ratio = folder.map.volume_ratio
    smallest = float(ratio.min() if folder.solved_on == "source" else 1.0 / ratio.max())
    last = folder.history[-1]
    if [record.step for record in folder.history] != list(range(1, last.step + 1)):
        yield f"{STEPS}: the steps are not numbered from 1"
    if not np.isclose(last.smallest_ratio, smallest, rtol=1e-6):
        yield (
            f"{STEPS}: the last step's smallest volume ratio is stored as {last.smallest_ratio:.6g}, "
            f"and the map has {smallest:.6g}"
        )


def _words(folder: MapFolder, measures: Mapping[str, Any]) -> Iterator[tuple[str, Any, Any]]:
    """Words and numbers of the JSON files: where, as stored, as made anew."""
    sides = (folder.source, folder.target)
    fresh = sidecars_of(folder.map, *sides, folder.forward, folder.backward)
    for name, sidecar in fresh.items():
        yield from certifying.unlike(f"{name}.json: ", dict(folder.sidecars[name]), certifying.plain(sidecar))
    stored = folder.certificate
    side = folder.solved_on
    mesh = mesh_document(folder.own_meshes[side], scan_document(getattr(folder, side)), side=side)
    pairs = {
        "source": (stored.source, scan_document(folder.source)),
        "target": (stored.target, scan_document(folder.target)),
        "mesh": ({key: stored.mesh.get(key) for key in mesh}, mesh),
        "measures": (stored.measures, measures),
    }
    for part, (old, new) in pairs.items():
        for where, a, b in certifying.unlike(part, certifying.plain(old), certifying.plain(new)):
            yield f"certificate.json: {where}", a, b
