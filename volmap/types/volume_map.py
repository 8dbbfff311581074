"""The map itself."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from volmap.kernels import tets as tet_kernels
from volmap.types.frozen import Frozen, require_finite
from volmap.types.tetmesh import TetMesh


@dataclass(frozen=True, eq=False)
class VolumeMap(Frozen):
    """A piecewise affine map: each point of a mesh and where it goes.

    Parameters
    ----------
    mesh : TetMesh
        The source body, in SOURCE's world.
    images : (n, 3) float64, mm, RAS+
        Where each point of the mesh goes, in TARGET's world.
    source, target : str
        Short names of the two scans.
    source_sha256, target_sha256 : str
        Digests of the scans (`LabelVolume.sha256`), which tell them apart when names do not; empty when not
        known.
    """

    mesh: TetMesh
    images: NDArray[np.float64]
    source: str = "source"
    target: str = "target"
    source_sha256: str = ""
    target_sha256: str = ""

    def __post_init__(self) -> None:
        images = self._own("images", np.float64, (len(self.mesh.points), 3))
        require_finite(images, "VolumeMap.images")

    @cached_property
    def image_mesh(self) -> TetMesh:
        """The mesh where it lands, in TARGET's world."""
        return self.mesh.moved(self.images)

    @cached_property
    def gradients(self) -> NDArray[np.float64]:
        """(m, 3, 3) deformation gradients F of the tets, ``dy = F dx``."""
        return tet_kernels.deformation_gradients(self.mesh.points, self.images, self.mesh.tets)

    @cached_property
    def volume_ratio(self) -> NDArray[np.float64]:
        """(m,) J = det F: volume in TARGET over volume in SOURCE; below 1 where tissue shrank."""
        return np.asarray(np.linalg.det(self.gradients))

    @cached_property
    def volume_ratio_at_points(self) -> NDArray[np.float64]:
        """(n,) volume in TARGET over volume in SOURCE of all tets around each point.

        Averaging over patches recovers a quantity that is constant in each tet to a higher order (after
        Zienkiewicz & Zhu, Int. J. Numer. Methods Eng. 33, 1992).
        """
        corners, n = self.mesh.tets.ravel(), len(self.mesh.points)
        here = np.bincount(corners, np.repeat(self.mesh.volumes, 4), n)
        there = np.bincount(corners, np.repeat(self.mesh.volumes * self.volume_ratio, 4), n)
        return np.asarray(np.divide(there, here, out=np.full(n, np.nan), where=here > 0))

    @cached_property
    def stretches(self) -> NDArray[np.float64]:
        """(m, 3) principal stretches (singular values of F), descending."""
        return np.asarray(np.linalg.svd(self.gradients, compute_uv=False))

    @property
    def maps(self) -> tuple[VolumeMap, ...]:
        """The maps a thing goes through, in order: this one (as in `MapChain`)."""
        return (self,)

    def reversed(self) -> VolumeMap:
        """The exact inverse: the image mesh, sent back to the mesh."""
        return VolumeMap(
            self.image_mesh,
            self.mesh.points,
            self.target,
            self.source,
            self.target_sha256,
            self.source_sha256,
        )
