"""A voxel grid in space."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError
from volmap.types.frozen import Frozen


@dataclass(frozen=True, eq=False)
class Grid(Frozen):
    """Shape and place of a voxel grid.

    Parameters
    ----------
    shape : tuple of 3 int
        Voxels along i, j, k.
    affine : (4, 4) float64
        Voxel centres ``(i, j, k, 1)`` to RAS+ world millimetres (NIfTI-1, section "sform").

    Raises
    ------
    InputError
        Shape not three positive counts, affine not finite or not invertible.
    """

    shape: tuple[int, int, int]
    affine: NDArray[np.float64]

    def __post_init__(self) -> None:
        shape = tuple(int(n) for n in self.shape)
        if len(shape) != 3 or min(shape) < 1:
            raise InputError("a grid needs three positive counts", where="shape", found=str(shape))
        object.__setattr__(self, "shape", shape)
        affine = self._own("affine", np.float64, (4, 4))
        if not np.isfinite(affine).all():
            raise InputError(
                "the affine holds values that are not finite",
                where="affine",
                remedy="rewrite the file's header with the scanner's orientation",
            )
        if not np.array_equal(affine[3], (0.0, 0.0, 0.0, 1.0)):
            raise InputError("the last row of an affine is 0 0 0 1", where="affine", found=str(affine[3]))
        lengths = np.linalg.norm(affine[:3, :3], axis=0)
        if lengths.min() <= 0 or abs(np.linalg.det(affine[:3, :3] / lengths)) < 1e-6:
            raise InputError(
                "the affine is not invertible",
                where="affine",
                found=f"voxel edges {np.round(lengths, 6).tolist()} mm",
                expected="three independent axes",
                remedy="rewrite the file's header with the scanner's orientation",
            )

    @property
    def spacing(self) -> NDArray[np.float64]:
        """(3,) edge lengths of a voxel, mm."""
        return np.asarray(np.linalg.norm(self.affine[:3, :3], axis=0))

    @property
    def voxel_mm3(self) -> float:
        """Volume of a voxel, mm3."""
        return float(abs(np.linalg.det(self.affine[:3, :3])))

    @property
    def voxel_mm(self) -> float:
        """Cube root of the volume of a voxel, mm: "one voxel" as a length."""
        return float(self.voxel_mm3 ** (1 / 3))

    @property
    def handedness(self) -> str:
        """'right' or 'left', by the sign of the determinant."""
        return "right" if np.linalg.det(self.affine[:3, :3]) > 0 else "left"

    @property
    def orientation(self) -> str:
        """Where each index grows to: "LIP" says i to the left, j downward (inferior), k to the back."""
        weights = np.abs(self.affine[:3, :3] / self.spacing)
        letters = [""] * 3
        for _ in range(3):
            world, index = divmod(int(np.argmax(weights)), 3)
            letters[index] = ("LR", "PA", "IS")[world][int(self.affine[world, index] > 0)]
            weights[world, :] = weights[:, index] = -1.0
        return "".join(letters)

    @property
    def shear(self) -> float:
        """Largest cosine between two voxel axes; 0 when they are orthogonal."""
        axes = self.affine[:3, :3] / self.spacing
        return float(np.abs(axes.T @ axes - np.eye(3)).max())

    def to_world(self, index: NDArray[np.float64]) -> NDArray[np.float64]:
        """(n, 3) voxel indices to (n, 3) world mm, RAS+."""
        return np.asarray(np.asarray(index, np.float64) @ self.affine[:3, :3].T + self.affine[:3, 3])

    def to_index(self, points: NDArray[np.float64]) -> NDArray[np.float64]:
        """(n, 3) world mm, RAS+, to (n, 3) continuous voxel indices."""
        inverse = np.linalg.inv(self.affine)
        return np.asarray(np.asarray(points, np.float64) @ inverse[:3, :3].T + inverse[:3, 3])

    def same_place(self, other: Grid, tolerance_mm: float = 1e-3) -> bool:
        """True when both grids have the same voxels at the same places, to `tolerance_mm`."""
        if self.shape != other.shape:
            return False
        corners = np.array([[i, j, k] for i in (0, 1) for j in (0, 1) for k in (0, 1)], float)
        corners *= np.array(self.shape) - 1
        return bool(np.abs(self.to_world(corners) - other.to_world(corners)).max() <= tolerance_mm)
