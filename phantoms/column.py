"""The gel column at rest: its shape, its two inclusions and the motion of the plate it is glued to.

The column lies in a test rig, its long axis along z. Its foot is glued to a plate that turns, its top
to one that turns and moves. At first it floats in a bath of its own density; as the bath is drained it
sags under its weight. One inclusion takes up water and swells, the other dries and shrinks. Lengths are
mm, angles degrees, stiffness kPa.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from .inclusion import Inclusion

HEIGHT_MM = 100.0
HALF_WIDTHS_MM = (21.0, 17.0)
NAMES = {1: "gel", 2: "swelling inclusion", 3: "shrinking inclusion"}
SHEAR_KPA = {1: 1.5, 2: 6.0, 3: 4.5}
DOWN = (0.6, -0.8, 0.0)
LAME_OVER_SHEAR = 8.0  # Poisson's ratio lambda / (2 (lambda + mu)) = 0.44 at small strain


INCLUSIONS = {
    2: Inclusion((5.0, 2.5, 68.0), (9.5, 7.5, 14.0), (12.0, -18.0, 25.0), 2.0),
    3: Inclusion((-6.0, -3.0, 30.0), (7.0, 6.0, 9.0), (-10.0, 20.0, -15.0), 3.5),
}


@dataclass(frozen=True)
class LoadStep:
    """What the rig does at one visit.

    Parameters
    ----------
    shift_mm : tuple of 3 float
        Translation of the top plate.
    turn_deg : tuple of 3 float
        Rotation vector of the top plate about the middle of the column's top.
    foot_turn_deg : tuple of 3 float
        Rotation vector of the foot plate about the middle of the column's foot.
    growth : dict of int to float
        Stress-free volume ratio of each label; labels not named keep 1.
    drained : float
        Share of its own weight the column feels, 0 (afloat) to 1.
    """

    shift_mm: tuple[float, float, float]
    turn_deg: tuple[float, float, float]
    foot_turn_deg: tuple[float, float, float]
    growth: dict[int, float]
    drained: float

    @property
    def weight_kpa_per_mm(self) -> tuple[float, ...]:
        """Body force on the column; `DOWN` has length one, water weighs 9.8e-3 kPa/mm."""
        return tuple(9.8e-3 * self.drained * d for d in DOWN)

    def between(self, other: LoadStep, share: float) -> LoadStep:
        """The load at `share` of the way to another."""

        def mix(a: Any, b: Any) -> Any:
            return tuple((1 - share) * p + share * q for p, q in zip(a, b, strict=True))

        labels = self.growth.keys() | other.growth.keys()
        growth = {k: (1 - share) * self.growth.get(k, 1.0) + share * other.growth.get(k, 1.0) for k in labels}
        drained = (1 - share) * self.drained + share * other.drained
        return LoadStep(
            mix(self.shift_mm, other.shift_mm),
            mix(self.turn_deg, other.turn_deg),
            mix(self.foot_turn_deg, other.foot_turn_deg),
            growth,
            drained,
        )


REST = LoadStep((0.0, 0.0, 0.0), (0.0, 0.0, 0.0), (0.0, 0.0, 0.0), {}, 0.0)
LOADS = (
    LoadStep((5.7, -7.6, 1.5), (-4.0, -3.0, 3.0), (12.0, 9.0, 0.0), {2: 1.06, 3: 0.94}, 0.10),
    LoadStep((9.2, -12.2, 3.0), (-6.3, -4.8, 5.0), (19.0, 14.3, 0.0), {2: 1.13, 3: 0.88}, 0.15),
    LoadStep((12.9, -17.2, 4.5), (-8.8, -6.6, 7.0), (26.4, 19.8, 0.0), {2: 1.22, 3: 0.80}, 0.20),
)


def labels_at(points: NDArray[np.float64]) -> NDArray[np.int64]:
    """(...,) label of each (..., 3) point of the column at rest, mm; 1 wherever no inclusion is."""
    labels = np.ones(points.shape[:-1], np.int64)
    for label, inclusion in INCLUSIONS.items():
        labels[inclusion.level(points) < 1.0] = label
    return labels


def rest_shape(box: NDArray[np.float64]) -> NDArray[np.float64]:
    """(n, 3) points of the box [-1, 1] x [-1, 1] x [0, 1] to (n, 3) points of the column, mm.

    The square is rounded by an elliptical grid map, then two polynomials (one of degree 1, one of
    degree 3 that turns with height) take its symmetry away.
    """
    u, v, w = box.T
    x, y = u * np.sqrt(1 - 0.35 * v**2), v * np.sqrt(1 - 0.35 * u**2)
    lobe = ((x + 1j * y) ** 3 * np.exp(1j * (0.8 + 1.2 * w))).real
    scale = 1 + 0.09 * (x * np.cos(0.5) + y * np.sin(0.5)) + 0.05 * lobe
    scale *= 1 - 0.22 * (2 * w - 1) ** 4 + 0.07 * np.sin(2 * np.pi * w)
    dome = 1 - (u**2 + v**2) / 2
    height = HEIGHT_MM * w + 5.0 * (2 * w - 1) * dome + 2.5 * w * u
    across = HALF_WIDTHS_MM[0] * x * scale + 3.0 * np.sin(np.pi * w)
    deep = HALF_WIDTHS_MM[1] * y * scale - 2.0 * np.sin(np.pi * w)
    return np.stack([across, deep, height], axis=1)


def top_motion(points: NDArray[np.float64], load: LoadStep) -> NDArray[np.float64]:
    """(n, 3) displacement, mm, of (n, 3) points glued to the top plate."""
    turned = _turned(points, load.turn_deg, np.array([0.0, 0.0, HEIGHT_MM]))
    return np.asarray(turned + np.array(load.shift_mm) - points)


def foot_motion(points: NDArray[np.float64], load: LoadStep) -> NDArray[np.float64]:
    """(n, 3) displacement, mm, of (n, 3) points glued to the foot plate."""
    return np.asarray(_turned(points, load.foot_turn_deg, np.zeros(3)) - points)


def _turned(
    points: NDArray[np.float64], turn_deg: tuple[float, float, float], middle: NDArray[np.float64]
) -> NDArray[np.float64]:
    turn = Rotation.from_rotvec(np.radians(turn_deg)).as_matrix()
    return np.asarray((points - middle) @ turn.T + middle)
