"""Look at label volumes before anything is built on them, and mend what can be mended openly."""

from volmap.screen.given_boundary import screen_given_boundary
from volmap.screen.mending import Change, Mended, mend
from volmap.screen.pairs import PairResult, compare, screen_pair
from volmap.screen.placement import screen_pairs_of_landmarks
from volmap.screen.results import LabelScreen, ScreenResult, raise_refusal
from volmap.screen.screening import screen

__all__ = [
    "Change",
    "LabelScreen",
    "Mended",
    "PairResult",
    "ScreenResult",
    "compare",
    "mend",
    "raise_refusal",
    "screen",
    "screen_given_boundary",
    "screen_pair",
    "screen_pairs_of_landmarks",
]
