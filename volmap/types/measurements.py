"""Numbers measured at places."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError
from volmap.types.frozen import Frozen, require_finite
from volmap.types.quantities import Quantity


@dataclass(frozen=True, eq=False)
class Measurements(Frozen):
    """Places of one scan and what was measured there.

    Parameters
    ----------
    names : tuple of str
        One a place; a name may stand for several.
    points : (n, 3) float64, mm, RAS+
    quantities : tuple of Quantity
        Of n values each.
    texts : mapping of str to tuple of str
        Further columns without a unit, by heading: kept letter for letter.

    Raises
    ------
    InputError
        Lengths that differ, a heading or quantity twice, points that are not finite.
    """

    names: tuple[str, ...]
    points: NDArray[np.float64]
    quantities: tuple[Quantity, ...] = ()
    texts: Mapping[str, tuple[str, ...]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        points = self._own("points", np.float64, (None, 3))
        require_finite(points, "Measurements.points")
        object.__setattr__(self, "names", tuple(self.names))
        object.__setattr__(self, "quantities", tuple(self.quantities))
        object.__setattr__(self, "texts", {k: tuple(v) for k, v in self.texts.items()})
        columns = {"name": len(self.names)} | {k: len(v) for k, v in self.texts.items()}
        for quantity in self.quantities:
            if quantity.name in columns:
                raise InputError("a quantity stands twice", where=quantity.name)
            columns[quantity.name] = len(quantity.values)
        for name, length in columns.items():
            if length != len(points):
                raise InputError(
                    "one value a place", where=name, found=f"{length}", expected=str(len(points))
                )

    def rows(self, kept: NDArray[np.int64]) -> Measurements:
        """Some of the places, in the order asked for."""
        return Measurements(
            tuple(self.names[i] for i in kept),
            self.points[kept],
            tuple(q.with_values(q.values[kept]) for q in self.quantities),
            {k: tuple(v[i] for i in kept) for k, v in self.texts.items()},
        )
