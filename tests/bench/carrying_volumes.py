"""What carrying a 256^3 volume costs on a map of about 100k tets: ``python tests/bench/carrying_volumes.py``.

The labels are the body's own tets drawn into the grid, split into blobs, so that several labels meet inside;
the grid's box is what the body fills.  Reading and writing the labels is timed apart.  The map needs no
solve: its images are those of a smooth deformation.  Results are printed and stored in
``tests/bench/carrying_volumes.json``.  Nothing here is a test: the machine's load enters the seconds, so
compare processor seconds.
"""

from __future__ import annotations

import json
import tempfile
from pathlib import Path
from typing import Any

import numba
import numpy as np
import volmap_phantoms
from carrying import WANTED_TETS, timed
from field import grid_around
from numpy.typing import NDArray
from scipy import ndimage

from volmap.carry import CarrySettings, carry
from volmap.carry.fields import carried_solid
from volmap.io.nifti import write_labels
from volmap.io.volumes import read_labels_with_findings
from volmap.mesh import MeshSettings, mesh
from volmap.types import (
    Grid,
    ImageVolume,
    LabelVolume,
    MapChain,
    Rule,
    Rules,
    TensorVolume,
    TetMesh,
    VectorVolume,
    VolumeMap,
)

SIDE = 256
STORED = Path(__file__).with_suffix(".json")


def main() -> None:
    """Print and store."""
    volume_map = deformed(WANTED_TETS)
    here, there = (grid_around(body, SIDE) for body in (volume_map.mesh, volume_map.image_mesh))
    labels = blobs(volume_map, here)
    warm_up(volume_map)
    told: dict[str, Any] = {
        "tets": len(volume_map.mesh.tets),
        "side": SIDE,
        "labels": len(labels.present),
        "in_body": float((labels.labels > 0).mean()),
        "threads": numba.get_num_threads(),
    }
    for name, thing, settings in things(labels):
        rounds = 3 if name in ("labels_nearest", "labels_one_hot") else 1
        found = timed(lambda t=thing, s=settings: carry(t, volume_map, onto=there, settings=s), rounds=rounds)
        told[name] = {"seconds": found["wall"], "cpu_seconds": found["cpu"]}
        print(name, told[name], flush=True)
        if name == "labels_shares":
            told[name] |= mass(labels, volume_map, found["answer"].thing)
            print(told[name], flush=True)
    told |= files(labels)
    chain = MapChain((volume_map, volume_map.reversed()))
    found = timed(lambda: carry(labels, chain, onto=here), rounds=1)
    told["labels_nearest_through_two_maps"] = {"seconds": found["wall"], "cpu_seconds": found["cpu"]}
    print(told["labels_nearest_through_two_maps"])
    STORED.write_text(json.dumps(told, indent=1) + "\n", encoding="utf-8")


def things(labels: LabelVolume) -> list[tuple[str, Any, CarrySettings]]:
    """What is carried, and how."""
    grid = labels.grid
    ct = ndimage.gaussian_filter(labels.labels.astype(np.float32), 1.5)
    vectors = VectorVolume(grid, np.stack([ct, -ct, 0 * ct], axis=-1))
    tensors = TensorVolume(grid, np.stack([ct, 0 * ct, ct, 0 * ct, 0 * ct, ct], axis=-1))
    image = ImageVolume(grid, ct)
    density, turn = Rules(Rule.DENSITY), Rules(Rule.TURN)
    return [
        ("labels_nearest", labels, CarrySettings()),
        ("labels_one_hot", labels, CarrySettings(labels="one-hot")),
        ("labels_shares", labels, CarrySettings(labels="shares")),
        ("image_linear", image, CarrySettings()),
        ("image_linear_density", image, CarrySettings(rules=density)),
        ("image_cubic", image, CarrySettings(image="cubic")),
        ("vectors_linear_turn", vectors, CarrySettings(rules=turn)),
        ("tensors_linear_turn", tensors, CarrySettings(rules=turn)),
    ]


def deformed(wanted_tets: int) -> VolumeMap:
    """A smooth deformation of the gel column."""
    labels = volmap_phantoms.make("gel-column").visits[0].labels
    body: TetMesh = mesh(labels, MeshSettings(wanted_tets=wanted_tets)).mesh
    volume_map = VolumeMap(body, body.points + 2.0 * np.sin(body.points[:, [1, 2, 0]] / 15.0))
    assert volume_map.volume_ratio.min() > 0
    return volume_map


def blobs(volume_map: VolumeMap, grid: Grid) -> LabelVolume:
    """The body on a grid, eight labels in it that meet along smooth surfaces."""
    alike = VolumeMap(volume_map.mesh, volume_map.mesh.points)
    solid = carried_solid(alike, grid).labels
    x = [np.sin(np.arange(n) / n * 2 * np.pi + shift) for n, shift in zip(grid.shape, (0, 1, 2), strict=True)]
    bits: NDArray[np.uint16] = np.zeros(grid.shape, np.uint16)
    for bit, (a, b) in enumerate(((0, 1), (1, 2), (2, 0))):
        wave = [v.reshape([-1 if d == axis else 1 for d in range(3)]) for axis, v in enumerate(x)]
        bits += ((wave[a] + wave[b]) > 0).astype(np.uint16) << bit
    return LabelVolume(grid, np.where(solid > 0, bits + 1, 0).astype(np.uint16), name="blobs.nii.gz")


def warm_up(volume_map: VolumeMap) -> None:
    """Compile, or load what was compiled."""
    small = grid_around(volume_map.mesh, 24)
    for _, thing, settings in things(blobs(volume_map, small)):
        carry(thing, volume_map, onto=grid_around(volume_map.image_mesh, 24), settings=settings)


def files(labels: LabelVolume) -> dict[str, Any]:
    """Reading and writing the labels, packed and not."""
    told: dict[str, Any] = {}
    with tempfile.TemporaryDirectory() as folder:
        for name in ("blobs.nii.gz", "blobs.nii"):
            place = Path(folder, name)
            write = timed(lambda p=place: write_labels(p, labels, overwrite=True), rounds=1)
            read = timed(lambda p=place: read_labels_with_findings(p), rounds=1)
            told[name] = {"write_cpu_seconds": write["cpu"], "read_cpu_seconds": read["cpu"]}
            print(name, told[name], flush=True)
    return told


def mass(labels: LabelVolume, volume_map: VolumeMap, shares: Any) -> dict[str, float]:
    """All labels' shares together against the volume of the image body; what lies beyond 0 is left out."""
    everywhere = LabelVolume(labels.grid, np.ones(labels.grid.shape, np.uint16))
    whole = carry(everywhere, volume_map, onto=shares.grid, settings=CarrySettings(labels="shares")).thing
    body = float(volume_map.image_mesh.volumes.sum())
    return {
        "relative_error_of_body_volume": whole.volume_of(1) / body - 1,
        "listed_shares": float(len(shares.voxel)),
        "mixed_voxels": float(len(np.unique(shares.voxel))),
    }


if __name__ == "__main__":
    main()
