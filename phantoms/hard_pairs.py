"""Hard pairs of label volumes, by name: shapes that are very unlike, thin, broken up, turned or pulled far.

What is known of the inside differs from pair to pair, and `Pair.truth` says no more than that: rigid motions
and even growth are exact; the slab's bending is the exact solution of finite bending.  For all others there
is none.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from volmap.types import LandmarkPairs
from volmap.types.errors import InputError

from .folded_slab import DEEP_MM, LONG_MM, THICK_MM, Flexure
from .inclusion import Inclusion
from .pairs import Body, Pair, Warped, recorded
from .phantom import Points, Truth
from .random_pairs import Lump
from .scanner import Protocol
from .twin_bodies import Body as Lobed
from .warps import Bend, Chain, Place, Stretch, Twist, Warp

Floats = NDArray[np.float64]
NAMES = {1: "bulk", 2: "core"}
PLAIN = Protocol((1.2, 1.2, 1.8), "RAS", margin_mm=7.0)
TILTED = Protocol((1.1, 1.1, 2.0), "LIP", (9.0, -6.0, 12.0), margin_mm=7.0)
STAY = Place()


@dataclass(frozen=True)
class Ellipsoids:
    """Pieces of label 1, each an ellipsoid or a rounded box.

    Parameters
    ----------
    pieces : tuple of Inclusion
    """

    pieces: tuple[Inclusion, ...]

    def labels_at(self, material: Points) -> NDArray[np.int64]:
        inside = np.any([p.level(material) < 1.0 for p in self.pieces], axis=0)
        return np.asarray(inside, np.int64)

    @property
    def box_mm(self) -> Floats:
        reach = np.array([np.full(3, max(p.semi_axes_mm) * 1.8) for p in self.pieces])
        centres = np.array([p.centre_mm for p in self.pieces])
        return np.stack([(centres - reach).min(axis=0), (centres + reach).max(axis=0)])


@dataclass(frozen=True)
class Ring:
    """A round bar bent into a ring about z, closed or with a gap.

    Parameters
    ----------
    radius_mm, thickness_mm : float
        Of the ring's middle line, and radius of the bar.
    gap_deg : float
        0 for a closed ring, a handle.
    """

    radius_mm: float
    thickness_mm: float
    gap_deg: float = 0.0

    def labels_at(self, material: Points) -> NDArray[np.int64]:
        x, y, z = material.T
        inside = (np.hypot(x, y) - self.radius_mm) ** 2 + z**2 < self.thickness_mm**2
        return np.asarray(inside & (np.abs(np.arctan2(y, -x)) >= np.radians(self.gap_deg / 2)), np.int64)

    @property
    def box_mm(self) -> Floats:
        wide = 1.02 * (self.radius_mm + self.thickness_mm)
        return np.array([[-1.0], [1.0]]) * (wide, wide, 1.02 * self.thickness_mm)


@dataclass(frozen=True)
class Cap:
    """A piece of a spherical wall of one thickness about z; its inside may be filled with label 2.

    Parameters
    ----------
    radius_mm, thick_mm : float
        Inner radius and thickness.
    opening_deg : float
        Angle from the z axis up to which the wall goes; 180 is a whole shell.
    filled : bool
    """

    radius_mm: float
    thick_mm: float
    opening_deg: float
    filled: bool = False

    def labels_at(self, material: Points) -> NDArray[np.int64]:
        r = np.linalg.norm(material, axis=1)
        polar = np.degrees(np.arctan2(np.hypot(material[:, 0], material[:, 1]), material[:, 2]))
        wall = (r >= self.radius_mm) & (r < self.radius_mm + self.thick_mm) & (polar <= self.opening_deg)
        return np.asarray(wall + 2 * (self.filled & (r < self.radius_mm)), np.int64)

    @property
    def box_mm(self) -> Floats:
        wide = self.radius_mm + self.thick_mm
        return np.array([[-wide, -wide, -wide], [wide, wide, wide]])


@dataclass(frozen=True)
class Slab:
    """The body of `folded-slab`, without its parts."""

    def labels_at(self, material: Points) -> NDArray[np.int64]:
        return (Flexure().labels_at(material) > 0).astype(np.int64)

    @property
    def box_mm(self) -> Floats:
        return np.array([[-0.5], [0.5]]) * (THICK_MM, LONG_MM, DEEP_MM)


@dataclass(frozen=True)
class Flexed:
    """One visit of the exact bending of `folded-slab`, as a warp; it keeps every volume."""

    visit: int

    def there(self, points: Points) -> Points:
        return Flexure().bent(points, self.visit)

    def back(self, points: Points) -> Points:
        return Flexure().unbent(points, self.visit)

    def ratio(self, points: Points) -> Floats:
        return np.ones(len(points))


def ball(radius_mm: float) -> Ellipsoids:
    """About the origin."""
    return ellipsoid(radius_mm, radius_mm, radius_mm)


def ellipsoid(a_mm: float, b_mm: float, c_mm: float) -> Ellipsoids:
    """About the origin, semi-axes along x, y, z."""
    return Ellipsoids((Inclusion((0.0, 0.0, 0.0), (a_mm, b_mm, c_mm), (0.0, 0.0, 0.0), 2.0),))


KNOBBED = Lump(
    Lobed(
        (15.0, 22.0, 13.0),
        (((1.0, 0.4, 0.2), 0.3, 5.0), ((-0.4, -1.0, 0.5), 0.2, 6.0), ((0.2, 0.5, -1.0), -0.15, 6.0)),
        {2: Inclusion((2.0, 7.0, 1.0), (6.0, 7.0, 5.5), (15.0, 20.0, 0.0), 2.2)},
    )
)


def _of_two(
    first: Body,
    second: Body,
    story: str,
    *,
    warps: tuple[Warp, Warp] = (STAY, STAY),
    protocols: tuple[Protocol, Protocol] = (PLAIN, TILTED),
    refusal: str = "",
) -> Pair:
    """A pair of two bodies that share nothing but their labels."""
    source = recorded(first, warps[0], protocols[0], NAMES, "source")
    target = recorded(second, warps[1], protocols[1], NAMES, "target")
    return Pair("", "hard", source, target, story, refusal=refusal)


def _of_one(body: Body, first: Warp, second: Warp, story: str, *, coarse: float = 1.0) -> Pair:
    """A pair of one body at two visits whose motion is exact."""
    protocols = _coarser(PLAIN, coarse), _coarser(TILTED, coarse)
    pair = _of_two(body, body, story, warps=(first, second), protocols=protocols)
    return replace(pair, truth=Truth(Warped(body, (first, second))))


def _coarser(protocol: Protocol, factor: float) -> Protocol:
    a, b, c = protocol.spacing_mm
    return replace(protocol, spacing_mm=(factor * a, factor * b, factor * c))


def _long_against_round() -> Pair:
    story = "a bar four times as long as thick against a ball of its volume"
    return _of_two(ellipsoid(9.0, 36.0, 9.0), ball(9.0 * 4 ** (1 / 3)), story)


def _bent_against_flat_slab() -> Pair:
    story = "a slab bent through 150 degrees against the slab laid flat: the exact solution of finite bending"
    return _of_one(Slab(), Flexed(0), Flexed(2), story, coarse=1.8)


def _horn_against_ball() -> Pair:
    story = "a horn, thick at one end, thin at the other and bent through 150 degrees, against a ball"
    horn = Chain((Stretch((1.0, 1.0, 1.0), 0.022), Bend(2 * 36.0 / np.radians(150.0))))
    return _of_two(ellipsoid(9.0, 36.0, 9.0), ball(14.5), story, warps=(horn, STAY))


def _thin_against_thick_handle() -> Pair:
    turned = Place((70.0, 20.0, 0.0), (15.0, -8.0, 4.0))
    story = "a ring of a thin bar against a ring of a bar twice as thick"
    return _of_two(Ring(19.0, 4.5), Ring(17.0, 9.0), story, warps=(STAY, turned))


def _pieces() -> Pair:
    first = Ellipsoids(
        (
            Inclusion((-17.0, 0.0, 0.0), (10.0, 12.0, 10.0), (0.0, 0.0, 20.0), 2.0),
            Inclusion((14.0, 6.0, 2.0), (8.0, 8.0, 12.0), (10.0, 0.0, 0.0), 2.0),
            Inclusion((4.0, -24.0, -3.0), (7.0, 6.0, 7.0), (0.0, 0.0, 0.0), 2.0),
        )
    )
    second = Ellipsoids(
        (
            Inclusion((-19.0, 3.0, 1.0), (12.0, 10.0, 11.0), (0.0, 10.0, 0.0), 2.0),
            Inclusion((13.0, 12.0, -2.0), (10.0, 8.0, 9.0), (0.0, 30.0, 0.0), 2.0),
            Inclusion((7.0, -22.0, -6.0), (6.0, 8.0, 6.0), (0.0, 0.0, 40.0), 2.0),
        )
    )
    return _of_two(first, second, "one label of three pieces far apart, each moved and reshaped on its own")


def _near_pieces() -> Pair:
    def two(gap_mm: float, lean_deg: float) -> Ellipsoids:
        return Ellipsoids(
            (
                Inclusion((-12.0 - gap_mm / 2, 0.0, 0.0), (12.0, 16.0, 12.0), (0.0, 0.0, 0.0), 2.0),
                Inclusion((11.0 + gap_mm / 2, 0.0, 0.0), (11.0, 14.0, 11.0), (lean_deg, 0.0, 0.0), 2.0),
            )
        )

    return _of_two(two(5.0, 0.0), two(2.6, 35.0), "one label of two pieces, two voxels apart in the second")


FINE = Protocol((1.0, 1.0, 1.0), "RAS", margin_mm=5.0)
FINE_TILTED = Protocol((1.0, 1.0, 1.0), "LAS", (8.0, 12.0, -10.0), margin_mm=5.0)


def _thin_sheets() -> Pair:
    story = "a spherical cap two voxels thick against a flatter one as thick"
    return _of_two(Cap(22.0, 2.0, 60.0), Cap(34.0, 2.0, 38.0), story, protocols=(FINE, FINE_TILTED))


def _thin_wall() -> Pair:
    story = "a wall two voxels thick round a filled core, against one pressed to an ellipsoid"
    pressed = Stretch((1.2, 0.95, 1.0), 0.006)
    body = Cap(17.0, 2.2, 180.0, filled=True)
    return _of_two(body, body, story, warps=(STAY, pressed), protocols=(FINE, FINE_TILTED))


def _ten_times_the_volume() -> Pair:
    grown = Place((0.0, 25.0, 10.0), (20.0, 5.0, -10.0), 10 ** (1 / 3))
    pair = _of_one(KNOBBED, STAY, grown, "a body and the same body, ten times its volume")
    return replace(pair, target=recorded(KNOBBED, grown, _coarser(TILTED, 2.0), NAMES, "target"))


def _grown_unevenly() -> Pair:
    grown = Chain((Stretch((2.6, 1.9, 2.0), 0.008), Place((0.0, 25.0, 10.0))))
    story = "a body against one ten times its volume, grown most in one direction and at one end"
    return _of_two(KNOBBED, KNOBBED, story, warps=(STAY, grown), protocols=(PLAIN, _coarser(TILTED, 2.0)))


def _half_turn() -> Pair:
    turned = Place((360 / 7, 540 / 7, 1080 / 7), (30.0, -20.0, 10.0))  # 180 degrees about (2, 3, 6)
    return _of_one(KNOBBED, STAY, turned, "a body turned by 180 degrees about an oblique axis")


def _half_turn_of_a_twisted_bar() -> Pair:
    turned = Chain((Twist(2.5), Place((0.0, 0.0, 180.0), (10.0, 5.0, 0.0))))
    bar = Ellipsoids((Inclusion((0.0, 0.0, 0.0), (13.0, 28.0, 9.0), (0.0, 0.0, 0.0), 2.6),))
    story = (
        "a flat bar, alike at both ends, against itself twisted through 140 degrees and turned end for end"
    )
    return _of_two(bar, bar, story, warps=(STAY, turned))


def _far_guides() -> Pair:
    pair = _of_two(
        ball(20.0), ball(20.0), "a ball against a ball, its middle pulled 10 mm aside by six guides"
    )
    points = np.array([[0, 0, 0], [5, 0, 0], [-5, 0, 0], [0, 5, 0], [0, -5, 0], [0, 0, 5]], float)
    names = tuple(f"pull-{k}" for k in range(len(points)))
    guides = LandmarkPairs(names, points, points + np.array([10.0, 0.0, 0.0]), ("guide",) * len(points))
    return replace(pair, guides=guides)


def _turning_guides() -> Pair:
    pair = _of_two(ball(20.0), ball(20.0), "a ball against a ball, turned by 70 degrees by two guides")
    points = np.array([[15.0, 0, 0], [-15.0, 0, 0]])
    turned = Place((0.0, 0.0, 70.0)).there(points)
    return replace(pair, guides=LandmarkPairs(("one", "two"), points, turned, ("guide",) * 2))


def _handle_missing() -> Pair:
    story = "a ring against the same ring cut open"
    return _of_two(Ring(18.0, 7.0), Ring(18.0, 7.0, 40.0), story, refusal="topology")


def _piece_lost() -> Pair:
    pair = _pieces()
    left = Ellipsoids((Inclusion((-19.0, 3.0, 1.0), (12.0, 10.0, 11.0), (0.0, 10.0, 0.0), 2.0),))
    lost = recorded(left, STAY, TILTED, NAMES, "target")
    return replace(pair, target=lost, story="three pieces against one of them", refusal="topology")


_MAKERS: dict[str, Callable[[], Pair]] = {
    f.__name__.strip("_").replace("_", "-"): f
    for f in (
        _long_against_round,
        _bent_against_flat_slab,
        _horn_against_ball,
        _thin_against_thick_handle,
        _pieces,
        _near_pieces,
        _thin_sheets,
        _thin_wall,
        _ten_times_the_volume,
        _grown_unevenly,
        _half_turn,
        _half_turn_of_a_twisted_bar,
        _far_guides,
        _turning_guides,
        _handle_missing,
        _piece_lost,
    )
}
HARD = tuple(_MAKERS)


def make_hard(name: str) -> Pair:
    """A hard pair.

    Parameters
    ----------
    name : str
        One of `HARD`.

    Raises
    ------
    InputError
        An unknown name.
    """
    if name not in _MAKERS:
        raise InputError("there is no hard pair of that name", found=repr(name), expected=", ".join(HARD))
    return replace(_MAKERS[name](), name=name)
