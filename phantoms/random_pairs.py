"""Random pairs of label volumes, by seed: smooth bodies with one to three labels, and what becomes of them.

The kinds, and what their second scan shows:

* bend, twist: the body bent through 40 to 140 degrees, twisted through 40 to 150 degrees;
* stretch: one direction stretched by 1.5 to 3 (or pressed together by as much), unevenly along the body;
* growth: the volume 2 to 10 times as large (or as small), partly from one place;
* turn: a mild bend, laid into the scanner at any angle up to 180 degrees;
* unlike: another body of the same family, with other proportions, lobes and places of its structures;
* mixed: bent, twisted, stretched, grown and turned.

All but `unlike` are arbitrary smooth warps, not deformations that a loaded body would take, so there is no
truth for the inside: they serve to see whether a map is found, valid, and reaches the boundary.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError

from .inclusion import Inclusion
from .pairs import Pair, outline, recorded, topology_of
from .phantom import Points
from .scanner import Protocol
from .twin_bodies import Body as Lobed
from .warps import Bend, Chain, Place, Stretch, Swell, Twist, Warp

KINDS = ("bend", "twist", "stretch", "growth", "turn", "unlike", "mixed")
CODES = ("RAS", "LAS", "LPS", "LIP", "SPR", "LSA")
MAKE_UPS = ("alone", "core", "cores", "parted", "parted core")
NAMES = {1: "bulk", 2: "core", 3: "far part"}
_Triple = tuple[float, float, float]
ATTEMPTS = 40  # drawings at most until both scans of a pair show one topology


@dataclass(frozen=True)
class Lump:
    """A lobed ellipsoid with structures inside, parted in two by a bowed face when asked.

    Parameters
    ----------
    lobed : Lobed
        With its structures.
    part : int
        Label of the material beyond the face; 0 for none.
    offset, bow : float
        The face is ``y/b = offset + bow ((x/a)^2 + (z/c)^2)`` with the semi-axes a, b, c.
    """

    lobed: Lobed
    part: int = 0
    offset: float = 0.0
    bow: float = 0.0

    def labels_at(self, material: Points) -> NDArray[np.int64]:
        labels = self.lobed.labels_at(material)
        if self.part:
            x, y, z = (material / np.array(self.lobed.semi_axes_mm)).T
            labels[(labels == 1) & (y > self.offset + self.bow * (x**2 + z**2))] = self.part
        return labels

    @property
    def box_mm(self) -> NDArray[np.float64]:
        outline = self.lobed.outline()
        return 1.03 * np.stack([outline.min(axis=0), outline.max(axis=0)])


def draw(seed: int, kind: str | None = None) -> Pair:
    """The pair of a seed, the same each time.

    Parameters
    ----------
    seed : int
    kind : str, optional
        One of `KINDS`; None takes them in turn.

    Raises
    ------
    InputError
        An unknown kind.
    """
    kind = kind or KINDS[seed % len(KINDS)]
    if kind not in KINDS:
        raise InputError("there is no such kind of pair", found=repr(kind), expected=", ".join(KINDS))
    random = np.random.default_rng([seed, KINDS.index(kind)])
    for _ in range(ATTEMPTS):
        pair = _drawn(random, kind, f"{kind}-{seed}")
        if topology_of(pair.source) == topology_of(pair.target):
            return pair
    raise AssertionError(f"{kind} {seed}: no two scans of one topology in {ATTEMPTS} drawings")


def _drawn(random: np.random.Generator, kind: str, name: str) -> Pair:
    make_up = str(random.choice(MAKE_UPS))
    slender = kind in ("bend", "twist", "mixed")
    body = _body(random, make_up, slender=slender)
    other = _body(random, make_up, slender=slender) if kind == "unlike" else body
    warp, words = _warp(random, kind, body.lobed.semi_axes_mm)
    first, second = _place(random, 20.0), _place(random, 180.0 if kind in ("turn", "mixed") else 40.0)
    scans = [
        recorded(b, w, _protocol(random, outline(b, w)), NAMES, f"{name}-{side}")
        for b, w, side in ((body, first, "source"), (other, Chain((warp, second)), "target"))
    ]
    return Pair(name, kind, scans[0], scans[1], f"{make_up}: {words}")


def _body(random: np.random.Generator, make_up: str, *, slender: bool) -> Lump:
    aspect = random.uniform(1.8, 2.6) if slender else random.uniform(1.1, 1.7)
    across = random.uniform(11.0, 14.0) if slender else random.uniform(14.0, 18.0)
    flat = random.uniform(1.05, 1.45)
    axes = (across * flat**0.5, across * aspect, across / flat**0.5)
    bumps = []
    for _ in range(random.integers(2, 5)):
        x, y, z = _direction(random)
        bumps.append(((x, y, z), random.uniform(-0.15, 0.3), random.uniform(3.0, 7.0)))
    return _filled(random, axes, tuple(bumps), make_up)


def _filled(
    random: np.random.Generator, axes: _Triple, bumps: tuple[tuple[_Triple, float, float], ...], make_up: str
) -> Lump:
    """Structures in a body, and its parting, clear of each other."""
    n_cores = {"alone": 0, "core": 1, "cores": 2, "parted": 0, "parted core": 1}[make_up]
    side = -1.0 if make_up == "parted core" else random.choice([-1.0, 1.0])
    structures = {
        label: _core(random, axes, side * along)
        for label, along in zip((2, 3)[:n_cores], (0.36, -0.36), strict=False)
    }
    lobed = Lobed(axes, bumps, structures)
    if make_up == "parted":
        return Lump(lobed, 2, random.uniform(-0.3, 0.3), random.uniform(-0.3, 0.3))
    if make_up == "parted core":
        return Lump(lobed, 3, random.uniform(0.15, 0.3), random.uniform(-0.1, 0.3))
    return Lump(lobed)


def _core(random: np.random.Generator, axes: _Triple, along: float) -> Inclusion:
    """A rounded structure of about half the body's width, at that share of its length."""
    a, b, c = axes
    thick = min(a, c)
    centre = (random.uniform(-0.12, 0.12) * a, along * b, random.uniform(-0.12, 0.12) * c)
    x, y, z = random.uniform(0.34, 0.5, 3) * thick
    turn = random.uniform(-40.0, 40.0, 3)
    return Inclusion(
        centre, (x, min(y, 0.27 * b), z), (turn[0], turn[1], turn[2]), float(random.uniform(2.0, 2.6))
    )


def _direction(random: np.random.Generator) -> _Triple:
    v = random.normal(size=3)
    x, y, z = v / np.linalg.norm(v)
    return float(x), float(y), float(z)


def _warp(random: np.random.Generator, kind: str, axes: _Triple) -> tuple[Warp, str]:
    """The warp of a kind for a body of those semi-axes, and what it does, in words."""
    links: list[Warp] = []
    words: list[str] = []
    mixed = kind == "mixed"
    if kind == "twist" or mixed:
        angle = random.choice([-1, 1]) * random.uniform(20, 70) if mixed else random.uniform(40.0, 150.0)
        links.append(Twist(angle / (2 * axes[1])))
        words.append(f"twisted through {abs(angle):.0f} degrees")
    if kind == "stretch" or mixed:
        links.append(_stretch(random, axes, most=1.8 if mixed else 3.0))
        words.append("stretched unevenly")
    if kind == "growth":
        links.append(_swell(random, axes))
        words.append("grown from one place")
    if kind in ("bend", "turn") or mixed:
        angle = random.uniform(40.0, 140.0) if kind == "bend" else random.uniform(20.0, 60.0)
        links.append(_bend(axes, angle, links))
        words.append(f"bent through up to {angle:.0f} degrees")
    if kind == "growth" or mixed:
        links, ratio = _grown(random, axes, links, least=2.0 if kind == "growth" else 1.0)
        words.append(f"volume ratio {ratio:.2f} at the middle")
    return Chain(tuple(links)), ", ".join(words) or "another body of one family"


def _stretch(random: np.random.Generator, axes: _Triple, most: float) -> Stretch:
    taper = random.uniform(-0.35, 0.35)
    strongest = random.uniform(1.5 if most > 2 else 1.1, most / np.exp(abs(taper)))
    factors = random.uniform(0.8, 1.1, 3)
    factors[random.integers(3)] = strongest if random.random() < 0.6 else 1.0 / strongest
    return Stretch((factors[0], factors[1], factors[2]), taper / axes[1])


def _swell(random: np.random.Generator, axes: _Triple) -> Swell:
    x, y, z = random.uniform(-0.4, 0.4, 3) * axes
    return Swell((x, y, z), random.uniform(0.2, 0.7), random.uniform(0.5, 0.9) * min(axes))


def _bend(axes: _Triple, angle_deg: float, before: list[Warp]) -> Bend:
    """Bent through that angle, or through what keeps the inner side from closing up."""
    corners = np.array(np.meshgrid(*([-a, a] for a in axes))).reshape(3, -1).T
    reach = np.abs(Chain(tuple(before)).there(corners)).max(axis=0)
    return Bend(max(2 * reach[1] / np.radians(angle_deg), 1.5 * reach[0]))


def _grown(
    random: np.random.Generator, axes: _Triple, links: list[Warp], least: float
) -> tuple[list[Warp], float]:
    """Enlarged (or diminished) evenly, to a volume ratio between `least` and 10 either way."""
    wanted = np.exp(random.uniform(np.log(least), np.log(10.0))) ** random.choice([-1.0, 1.0])
    inside = random.uniform(-0.6, 0.6, (500, 3)) * axes
    ratio = Chain(tuple(links)).ratio(inside).mean()
    return [*links, Place(scale=float(np.cbrt(wanted / ratio)))], float(wanted)


def _place(random: np.random.Generator, most_deg: float) -> Place:
    x, y, z = random.uniform(0.0, most_deg) * np.array(_direction(random))
    shift = random.uniform(-50.0, 50.0, 3)
    return Place((x, y, z), (shift[0], shift[1], shift[2]))


def _protocol(random: np.random.Generator, outline: Points) -> Protocol:
    """A tilted grid, 40 to 60 voxels along the body, slices up to 2.5 times as thick, 10 or more of them."""
    spread = outline @ np.linalg.svd(outline - outline.mean(axis=0), full_matrices=False)[2].T
    widest, thinnest = np.ptp(spread, axis=0).max(), np.ptp(spread, axis=0).min()
    edge = min(widest / random.uniform(40.0, 60.0), thinnest / 14.0)
    slice_mm = min(edge * random.uniform(1.0, 2.5), thinnest / 10.0)
    tilt = random.uniform(-15.0, 15.0, 3)
    return Protocol(
        (edge, edge, slice_mm), str(random.choice(CODES)), (tilt[0], tilt[1], tilt[2]), 4 * slice_mm
    )
