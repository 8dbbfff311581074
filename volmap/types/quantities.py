"""What is measured at places, and how its numbers change when the places are carried."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError, UnsaidError
from volmap.types.frozen import Frozen


class Rule(StrEnum):
    """How the numbers of a quantity change when the tissue they belong to is carried.

    F is the gradient of the map where the value was taken (``dy = F dx``), J = det F, and R the rotation in
    the polar decomposition F = R U.  v is a vector, T a symmetric tensor.

    ========== ================= ================== ==================
    rule       scalar c          vector v           tensor T
    ========== ================= ================== ==================
    `value`    c                 --                 --
    `density`  c / J             --                 --
    `turn`     --                R v                R T R^T
    `line`     --                F v                F T F^T
    `gradient` --                F^-T v             F^-T T F^-1
    `flux`     --                F v / J            F T F^T / J
    ========== ================= ================== ==================

    `value` keeps the number: a temperature, a T1 time, an age, and also an amount that sits on a point (a
    mass, a count).  `density` keeps the amount in a piece of tissue: counts, dose or mass per volume.
    `turn` keeps lengths and eigenvalues and turns directions with the tissue: a fibre direction of unit
    length, a diffusion tensor.  `line` stretches with material lines: a displacement from one point of
    the tissue to another.  `gradient` keeps products with material lines: the gradient of a
    value, a normal of a surface (its direction), a metric such as a strain of Green.  `flux` keeps what
    passes through a material surface (Piola's transformation; of a tensor, second Piola-Kirchhoff stress
    to that of Cauchy).

    All but `turn` may be applied map by map: carrying through two maps is carrying through their
    composition.  With `turn` it is the rotation of the whole way that counts, and R of a product is not the
    product of the Rs unless one of them is a pure rotation.
    """

    VALUE = "value"
    DENSITY = "density"
    TURN = "turn"
    LINE = "line"
    GRADIENT = "gradient"
    FLUX = "flux"

    def sentence(self, rank: int) -> str:
        """What was done to the numbers of a scalar (rank 0), vector (1) or symmetric tensor (2)."""
        require_rule(self, rank)
        return _SENTENCES[self][rank]


_OF_RANK = {
    0: (Rule.VALUE, Rule.DENSITY),
    1: (Rule.TURN, Rule.LINE, Rule.GRADIENT, Rule.FLUX),
    2: (Rule.TURN, Rule.LINE, Rule.GRADIENT, Rule.FLUX),
}
KINDS = ("scalar", "vector", "symmetric tensor")
_SENTENCES = {
    Rule.VALUE: {0: "kept as it was"},
    Rule.DENSITY: {0: "divided by the volume ratio J: the amount in a piece of tissue is kept"},
    Rule.TURN: {
        1: "turned by R, the rotation of the polar decomposition of F: its length is kept",
        2: "turned by R, the rotation of the polar decomposition of F (R T R^T): its eigenvalues are kept",
    },
    Rule.LINE: {
        1: "stretched and turned with material lines (F v)",
        2: "stretched and turned with material lines (F T F^T)",
    },
    Rule.GRADIENT: {
        1: "carried as a gradient (F^-T v): its product with a material line is kept",
        2: "carried as a form on material lines (F^-T T F^-1): its values on them are kept",
    },
    Rule.FLUX: {
        1: "carried as a flux (F v / J): what passes through a material surface is kept",
        2: "carried as a flux (F T F^T / J, Piola)",
    },
}


def rules_of_rank(rank: int) -> tuple[Rule, ...]:
    """The rules a scalar (rank 0), a vector (1) or a symmetric tensor (2) may follow."""
    return _OF_RANK[rank]


def require_rule(rule: Rule | str, rank: int, where: str = "") -> Rule:
    """The rule, when it is one for that rank (0 scalar, 1 vector, 2 symmetric tensor).

    Raises
    ------
    InputError
        An unknown word, or a rule for quantities of another rank.
    """
    allowed = _OF_RANK[rank]
    if rule not in tuple(allowed):
        raise InputError(
            f"is no rule for a {KINDS[rank]}",
            where=where,
            found=str(rule)[:40],
            expected=" or ".join(r.value for r in allowed),
        )
    return Rule(rule)


@dataclass(frozen=True, eq=False)
class Quantity(Frozen):
    """Values of one quantity, one a place.

    Parameters
    ----------
    name : str
    unit : str
        "1" for a number without unit.
    values : (n,), (n, 3) or (n, 3, 3) float64
        Scalars, vectors (components along x, y, z of the world, RAS+) or symmetric tensors.  NaN where a
        value is missing.
    rule : Rule
        How the numbers change when the places are carried.

    Raises
    ------
    InputError
        Another shape, infinite values, tensors that are not symmetric, a rule for another rank.
    """

    name: str
    unit: str
    values: NDArray[np.float64]
    rule: Rule

    def __post_init__(self) -> None:
        rank = np.ndim(self.values) - 1
        if not 0 <= rank <= 2:
            raise InputError("is neither scalar, vector nor tensor", where=self.name, found=f"rank {rank}")
        self._own("values", np.float64, (None, *(3,) * rank))
        object.__setattr__(self, "rule", require_rule(self.rule, rank, self.name))
        if np.isinf(self.values).any():
            raise InputError("holds infinite values", where=self.name)
        if rank == 2 and not _symmetric(self.values):
            raise InputError("holds tensors that are not symmetric", where=self.name)

    @property
    def rank(self) -> int:
        """0 for scalars, 1 for vectors, 2 for symmetric tensors."""
        return self.values.ndim - 1

    def with_values(self, values: NDArray[np.float64]) -> Quantity:
        """The same quantity with other numbers."""
        return Quantity(self.name, self.unit, values, self.rule)


def _symmetric(tensors: NDArray[np.float64]) -> bool:
    """True when each tensor equals its transpose up to single precision of its largest component."""
    pairs = [(tensors[:, i, j], tensors[:, j, i]) for i, j in ((0, 1), (0, 2), (1, 2))]
    if all((a == b).all() for a, b in pairs):
        return True
    known = np.nan_to_num(tensors)
    largest = np.abs(known).max(axis=(1, 2), keepdims=True, initial=0.0)
    return bool((np.abs(known - known.swapaxes(1, 2)) <= 1e-6 * largest).all())


@dataclass(frozen=True)
class Rules:
    """What the user said about the quantities of a table or a mesh.

    Parameters
    ----------
    of_all : Rule, optional
        For every quantity it is a rule for and that `of_each` does not name.
    of_each : mapping of str to Rule
        By name of the quantity.
    left_out : tuple of str
        Quantities that shall stay behind.
    """

    of_all: Rule | None = None
    of_each: Mapping[str, Rule] = field(default_factory=dict)
    left_out: tuple[str, ...] = ()

    def of(self, name: str, rank: int) -> Rule | None:
        """The rule for a quantity, or None where nothing was said.

        Raises
        ------
        InputError
            The rule said for this very quantity is none for its rank.
        """
        if name in self.of_each:
            return require_rule(self.of_each[name], rank, name)
        return self.of_all if self.of_all in _OF_RANK[rank] else None

    def required(self, name: str, rank: int, where: str = "") -> Rule:
        """The rule for a quantity.

        Raises
        ------
        UnsaidError
            Where nothing was said.
        """
        rule = self.of(name, rank)
        if rule is None:
            raise UnsaidError(
                f"nothing says how the {KINDS[rank]} {name} changes when it is carried",
                where=where,
                expected=f"a rule for it: {' or '.join(r.value for r in _OF_RANK[rank])}",
                remedy=f"say for instance --rule {name}={_OF_RANK[rank][0].value}",
            )
        return rule

    def require_known(self, names: Iterable[str], where: str = "") -> None:
        """Refuse rules for quantities that are not there, also to leave them out.

        Raises
        ------
        UnsaidError
        """
        known = list(names)
        unknown = [name for name in (*self.of_each, *self.left_out) if name not in known]
        if unknown:
            raise UnsaidError(
                f"holds no quantity {unknown[0]!r}, of which something was said",
                where=where,
                found=", ".join(known[:12]) or "no quantities",
            )
