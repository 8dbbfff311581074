"""Closed-form warps of space, both ways, with their volume ratios: what second bodies are made with.

They are geometry, not mechanics: no gel deforms like this when it is loaded.  Where one of them carries the
shape of a body into another shape, that shape is right, but nothing says that the material inside went the
same way.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

Points = NDArray[np.float64]
Floats = NDArray[np.float64]


class Warp(Protocol):
    """A one-to-one map of space, on the part of space where it is used."""

    def there(self, points: Points) -> Points:
        """(n, 3) images of (n, 3) points, mm."""

    def back(self, points: Points) -> Points:
        """(n, 3) points whose images are at `points`, mm."""

    def ratio(self, points: Points) -> Floats:
        """(n,) volume of the image over volume, at (n, 3) points."""


@dataclass(frozen=True)
class Bend:
    """Fibres along y become arcs about the line x = -radius_mm.

    Parameters
    ----------
    radius_mm : float
        Of the arc that the y axis becomes; the body must stay at x > -radius_mm and |y| < pi radius_mm.
    """

    radius_mm: float

    def there(self, points: Points) -> Points:
        x, y, z = points.T
        r, angle = self.radius_mm + x, y / self.radius_mm
        return np.stack([r * np.cos(angle) - self.radius_mm, r * np.sin(angle), z], axis=1)

    def back(self, points: Points) -> Points:
        x, y, z = points.T
        x = x + self.radius_mm
        return np.stack([np.hypot(x, y) - self.radius_mm, np.arctan2(y, x) * self.radius_mm, z], axis=1)

    def ratio(self, points: Points) -> Floats:
        return np.asarray(1 + points[:, 0] / self.radius_mm)


@dataclass(frozen=True)
class Twist:
    """Slices across y turn about it, by so much a millimetre; volumes stay.

    Parameters
    ----------
    rate_deg : float
        Degrees a mm.
    """

    rate_deg: float

    def there(self, points: Points) -> Points:
        return _turned_about_y(points, np.radians(self.rate_deg) * points[:, 1])

    def back(self, points: Points) -> Points:
        return _turned_about_y(points, -np.radians(self.rate_deg) * points[:, 1])

    def ratio(self, points: Points) -> Floats:
        return np.ones(len(points))


def _turned_about_y(points: Points, angle: Floats) -> Points:
    x, y, z = points.T
    c, s = np.cos(angle), np.sin(angle)
    return np.stack([c * x + s * z, y, c * z - s * x], axis=1)


@dataclass(frozen=True)
class Stretch:
    """Stretches along the axes; those across y also grow along y, by ``exp(taper y)``.

    Parameters
    ----------
    factors : tuple of 3 float
        Along x, y, z, at y = 0.
    taper : float
        1/mm.
    """

    factors: tuple[float, float, float]
    taper: float = 0.0

    def there(self, points: Points) -> Points:
        return np.asarray(points * self._stretches(points[:, 1]))

    def back(self, points: Points) -> Points:
        return np.asarray(points / self._stretches(points[:, 1] / self.factors[1]))

    def ratio(self, points: Points) -> Floats:
        return np.asarray(self._stretches(points[:, 1]).prod(axis=1))

    def _stretches(self, y: Floats) -> Floats:
        across = np.exp(self.taper * y)
        a, b, c = self.factors
        return np.stack([a * across, np.full_like(y, b), c * across], axis=1)


@dataclass(frozen=True)
class Swell:
    """Growth about a centre that fades with distance: ``r -> r (1 + height exp(-r^2 / 2 width^2))``.

    Parameters
    ----------
    centre_mm : tuple of 3 float
    height : float
        The stretch at the centre is 1 + height; from 0 up to 2.2 the warp is one-to-one (its radial stretch
        is least at ``r^2 = 3 width^2``: 1 - 2 height exp(-3/2)).
    width_mm : float
    """

    centre_mm: tuple[float, float, float]
    height: float
    width_mm: float

    def there(self, points: Points) -> Points:
        apart = points - np.array(self.centre_mm)
        return np.asarray(points + apart * self._fade(np.linalg.norm(apart, axis=1))[:, None])

    def back(self, points: Points) -> Points:
        apart = points - np.array(self.centre_mm)
        reached = np.linalg.norm(apart, axis=1)
        low, high = np.zeros_like(reached), reached.copy()
        for _ in range(60):
            middle = 0.5 * (low + high)
            beyond = middle * (1 + self._fade(middle)) > reached
            low, high = np.where(beyond, low, middle), np.where(beyond, middle, high)
        share = np.divide(high, reached, out=np.zeros_like(high), where=reached > 0)
        return np.asarray(np.array(self.centre_mm) + apart * share[:, None])

    def ratio(self, points: Points) -> Floats:
        r = np.linalg.norm(points - np.array(self.centre_mm), axis=1)
        fade = self._fade(r)
        return np.asarray((1 + fade) ** 2 * (1 + fade * (1 - (r / self.width_mm) ** 2)))

    def _fade(self, r: Floats) -> Floats:
        return np.asarray(self.height * np.exp(-0.5 * (r / self.width_mm) ** 2))


@dataclass(frozen=True)
class Place:
    """Enlarged, turned about the origin and shifted: where a body lies in its scanner.

    Parameters
    ----------
    turn_deg : tuple of 3 float
        Axis of the turn, as long as its angle in degrees.
    shift_mm : tuple of 3 float
    scale : float
    """

    turn_deg: tuple[float, float, float] = (0.0, 0.0, 0.0)
    shift_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)
    scale: float = 1.0

    def there(self, points: Points) -> Points:
        return np.asarray(self.scale * points @ self._rotation().T + np.array(self.shift_mm))

    def back(self, points: Points) -> Points:
        return np.asarray((points - np.array(self.shift_mm)) @ self._rotation() / self.scale)

    def ratio(self, points: Points) -> Floats:
        return np.full(len(points), self.scale**3)

    def _rotation(self) -> NDArray[np.float64]:
        return np.asarray(Rotation.from_rotvec(self.turn_deg, degrees=True).as_matrix())


@dataclass(frozen=True)
class Chain:
    """One warp after another, the first one first.

    Parameters
    ----------
    links : tuple of Warp
    """

    links: tuple[Warp, ...]

    def there(self, points: Points) -> Points:
        for link in self.links:
            points = link.there(points)
        return points

    def back(self, points: Points) -> Points:
        for link in reversed(self.links):
            points = link.back(points)
        return points

    def ratio(self, points: Points) -> Floats:
        ratio = np.ones(len(points))
        for link in self.links:
            ratio = ratio * link.ratio(points)
            points = link.there(points)
        return ratio
