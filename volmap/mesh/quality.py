"""The quality table of a mesh."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.tets import dihedral_degrees
from volmap.kernels.topology import match_faces
from volmap.mesh.euler import euler_of_tets
from volmap.mesh.labelled import Complex
from volmap.mesh.pinned import pinned_tets
from volmap.mesh.specks import pieces_of, point_pieces
from volmap.types.tetmesh import TetMesh

Ints = NDArray[np.int64]


@dataclass(frozen=True)
class VoxelFacts:
    """What the voxels of one label say.

    Parameters
    ----------
    volume_mm3 : float
        Of all its voxels.
    specks_mm3 : float
        Pieces too small to be asked of the mesh; part of `volume_mm3`.
    pieces : int
        6-connected, specks left out.
    euler : int
        6-connected, specks included.
    thin : bool
        True when hardly any voxel is two voxels away from the outside: a wall of one or two voxels.
    """

    volume_mm3: float
    specks_mm3: float
    pieces: int
    euler: int
    thin: bool


@dataclass(frozen=True)
class LabelQuality:
    """One row of the table.

    Parameters
    ----------
    label : int
    name : str
    tets : int
    volume_mm3, voxel_mm3, specks_mm3 : float
        Of the mesh, of the voxels, of the specks left out of the mesh.
    volume_error_pct : float
        Of the mesh against its voxels without specks.
    pieces, euler : int
        Of the mesh, face-connected; 0 tets have neither.
    voxel_pieces, voxel_euler : int
    hinges : int
        Pieces that hang on another piece of the label by an edge or a point only.
    min_dihedral_deg, p1_dihedral_deg, p5_dihedral_deg, median_dihedral_deg : float
        Of the smallest dihedral angle of each tet; NaN without tets.
    max_dihedral_deg : float
    thin : bool
    """

    label: int
    name: str
    tets: int
    volume_mm3: float
    voxel_mm3: float
    specks_mm3: float
    volume_error_pct: float
    pieces: int
    voxel_pieces: int
    euler: int
    voxel_euler: int
    hinges: int
    min_dihedral_deg: float
    p1_dihedral_deg: float
    p5_dihedral_deg: float
    median_dihedral_deg: float
    max_dihedral_deg: float
    thin: bool


@dataclass(frozen=True)
class QualityTable:
    """How good a mesh is.

    Parameters
    ----------
    rows : tuple of LabelQuality
        One for each label of the voxels, ascending.
    points, tets : int
    min_dihedral_deg, max_dihedral_deg : float
    pinned_tets : int
        Tets whose four corners all lie on interfaces.
    inverted_tets : int
        Tets whose volume is not positive.
    """

    rows: tuple[LabelQuality, ...]
    points: int
    tets: int
    min_dihedral_deg: float
    max_dihedral_deg: float
    pinned_tets: int
    inverted_tets: int

    def row(self, label: int) -> LabelQuality:
        """The row of a label.

        Raises
        ------
        KeyError
        """
        for row in self.rows:
            if row.label == label:
                return row
        raise KeyError(label)

    def as_dict(self) -> dict[str, Any]:
        """Plain values, for JSON."""
        return asdict(self)


def _angles(angles: NDArray[np.float64]) -> dict[str, float]:
    """Percentiles of the smallest, and the largest, of (m, 6) dihedral angles."""
    if not len(angles):
        names = ("min_dihedral_deg", "p1_dihedral_deg", "p5_dihedral_deg", "median_dihedral_deg")
        return dict.fromkeys((*names, "max_dihedral_deg"), float("nan"))
    least = angles.min(axis=1)
    p1, p5, median = np.percentile(least, [1.0, 5.0, 50.0])
    return {
        "min_dihedral_deg": float(least.min()),
        "p1_dihedral_deg": float(p1),
        "p5_dihedral_deg": float(p5),
        "median_dihedral_deg": float(median),
        "max_dihedral_deg": float(angles.max()),
    }


def quality_table(mesh: TetMesh, voxels: dict[int, VoxelFacts], names: dict[int, str]) -> QualityTable:
    """The table of a mesh against what its voxels say.

    Parameters
    ----------
    mesh : TetMesh
    voxels : dict of int to VoxelFacts
        For every label the voxels have.
    names : dict of int to str
    """
    points, tets, labels = np.array(mesh.points), np.array(mesh.tets), np.array(mesh.labels)
    angles = dihedral_degrees(points, tets)
    faces = match_faces(tets)
    euler = euler_of_tets(tets, labels, len(points), faces=faces)
    piece, bundle = pieces_of(tets, labels, faces=faces), point_pieces(tets, labels)
    rows = []
    for label, facts in sorted(voxels.items()):
        of = labels == label
        n_pieces, volume = len(np.unique(piece[of])), float(mesh.volumes[of].sum())
        asked = facts.volume_mm3 - facts.specks_mm3
        rows.append(
            LabelQuality(
                label=label,
                name=names[label],
                tets=int(of.sum()),
                volume_mm3=volume,
                voxel_mm3=facts.volume_mm3,
                specks_mm3=facts.specks_mm3,
                volume_error_pct=100.0 * (volume - asked) / asked,
                pieces=n_pieces,
                voxel_pieces=facts.pieces,
                euler=euler.get(label, 0),
                voxel_euler=facts.euler,
                hinges=n_pieces - len(np.unique(bundle[of])),
                thin=facts.thin,
                **_angles(angles[of]),
            )
        )
    return QualityTable(
        rows=tuple(rows),
        points=len(points),
        tets=len(tets),
        min_dihedral_deg=float(angles.min()),
        max_dihedral_deg=float(angles.max()),
        pinned_tets=int(pinned_tets(Complex(points, tets, labels), faces=faces).sum()),
        inverted_tets=int((mesh.volumes <= 0).sum()),
    )
