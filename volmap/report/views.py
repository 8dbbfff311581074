"""Where the pictures are looked at from, and what stands on which side of them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class View:
    """An orthographic way of looking, in world axes (RAS+).

    Parameters
    ----------
    words : str
    right, up : tuple of 3 float
        World directions, of unit length and square to each other, that point right and up on the picture.
    """

    words: str
    right: tuple[float, float, float]
    up: tuple[float, float, float]

    @property
    def toward(self) -> Floats:
        """(3,) world direction from the body to the eye."""
        return np.cross(self.right, self.up)

    @property
    def axes(self) -> Floats:
        """(3, 3) rows right, up, toward."""
        return np.array([self.right, self.up, self.toward])

    @property
    def letters(self) -> tuple[str, str, str, str]:
        """Anatomical letters at the left, right, top and bottom of the picture."""
        right, up = letter_of(np.array(self.right)), letter_of(np.array(self.up))
        return opposite(right), right, up, opposite(up)


def letter_of(direction: Floats) -> str:
    """R, A, S, L, P or I: the world axis nearest to a direction."""
    axis = int(np.argmax(np.abs(direction)))
    return ("RAS" if direction[axis] > 0 else "LPI")[axis]


def opposite(letter: str) -> str:
    """The letter on the other side."""
    return {"R": "L", "A": "P", "S": "I", "L": "R", "P": "A", "I": "S"}[letter]


# The body's left stands on the right of the picture wherever left and right show.
FRONT = View("from the front", (-1.0, 0.0, 0.0), (0.0, 0.0, 1.0))
LEFT = View("from the left", (0.0, -1.0, 0.0), (0.0, 0.0, 1.0))
BELOW = View("from below", (-1.0, 0.0, 0.0), (0.0, 1.0, 0.0))
STRAIGHT = (FRONT, LEFT, BELOW)


def tilted(view: View, aside_deg: float, raised_deg: float) -> View:
    """A view from further to the right of the picture by `aside_deg`, and from higher by `raised_deg`."""
    a, h = np.radians(aside_deg), np.radians(raised_deg)
    eye = np.array([np.sin(a) * np.cos(h), np.sin(h), np.cos(a) * np.cos(h)]) @ view.axes
    right = np.array([np.cos(a), 0.0, -np.sin(a)]) @ view.axes
    up = np.cross(eye, right)
    return View(f"{view.words}, turned and raised", _three(right), _three(up))


def _three(vector: Floats) -> tuple[float, float, float]:
    return float(vector[0]), float(vector[1]), float(vector[2])


def round_length(mm: float) -> float:
    """The largest of 1, 2, 5 times a power of ten that is not above `mm`."""
    power = 10.0 ** np.floor(np.log10(mm))
    return float(max(k * power for k in (1.0, 2.0, 5.0) if k * power <= mm * (1 + 1e-9)))
