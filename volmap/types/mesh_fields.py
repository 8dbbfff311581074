"""A mesh or surface with data on it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError
from volmap.types.frozen import Frozen
from volmap.types.quantities import Quantity
from volmap.types.surface import Surface
from volmap.types.tetmesh import TetMesh


@dataclass(frozen=True, eq=False)
class MeshFields(Frozen):
    """A mesh or surface with quantities on its points and cells.

    Parameters
    ----------
    body : TetMesh or Surface
    at_points, at_cells : tuple of Quantity
        One value a point; one a tet or triangle.
    kept_at_points, kept_at_cells : mapping of str to array
        Numbers that mean the same wherever they are (labels, colours): never changed.

    Raises
    ------
    InputError
        Lengths that differ, or a name twice.
    """

    body: TetMesh | Surface
    at_points: tuple[Quantity, ...] = ()
    at_cells: tuple[Quantity, ...] = ()
    kept_at_points: Mapping[str, NDArray[Any]] = field(default_factory=dict)
    kept_at_cells: Mapping[str, NDArray[Any]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        for name in ("kept_at_points", "kept_at_cells"):
            arrays = {k: np.array(v) for k, v in getattr(self, name).items()}
            for array in arrays.values():
                array.setflags(write=False)
            object.__setattr__(self, name, arrays)
        for quantities, kept, n in (
            (self.at_points, self.kept_at_points, len(self.body.points)),
            (self.at_cells, self.kept_at_cells, len(self.cells)),
        ):
            lengths = [(q.name, len(q.values)) for q in quantities] + [(k, len(v)) for k, v in kept.items()]
            if len({name for name, _ in lengths}) < len(lengths):
                raise InputError("two arrays have the same name", where="MeshFields")
            for name, length in lengths:
                if length != n:
                    raise InputError(
                        "an array does not fit the mesh", where=name, found=f"{length} rows", expected=str(n)
                    )

    @property
    def points(self) -> NDArray[np.float64]:
        """(n, 3) points of the body, mm, RAS+."""
        return self.body.points

    @property
    def cells(self) -> NDArray[np.int64]:
        """(m, 4) tets or (m, 3) triangles."""
        return self.body.tets if isinstance(self.body, TetMesh) else self.body.triangles
