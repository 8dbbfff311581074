"""Coded meanings of labels, from a terminology."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

from volmap.types.errors import InputError


@dataclass(frozen=True)
class Code:
    """A concept of a terminology (DICOM PS3.3, 8.8: coded entry).

    Parameters
    ----------
    value : str
        The code, such as "10200004".
    scheme : str
        Short name of the terminology, such as "SCT".
    meaning : str
        The concept in words.
    """

    value: str
    scheme: str
    meaning: str


@dataclass(frozen=True)
class LabelCodes:
    """What a label is, in codes.

    Parameters
    ----------
    category : Code
        Of what sort it is, such as "Anatomical Structure".
    kind : Code
        What it is, such as "Liver".
    region : Code, optional
        Where it is, such as "Abdomen", if that is said.
    side, region_side : Code, optional
        What the kind, or the region, is narrowed to, such as "Left" (type modifier, region modifier).
    """

    category: Code
    kind: Code
    region: Code | None = None
    side: Code | None = None
    region_side: Code | None = None

    def as_dict(self) -> dict[str, Any]:
        """Plain values, for JSON."""
        return {key: code for key, code in asdict(self).items() if code is not None}

    @classmethod
    def of(cls, told: Mapping[str, Any]) -> LabelCodes:
        """From the plain values of `as_dict`.

        Raises
        ------
        InputError
            Not as `as_dict` gives them.
        """
        try:
            needed, others = ("category", "kind"), ("region", "side", "region_side")
            keys = (*needed, *(key for key in others if told.get(key)))
            return cls(**{key: Code(**{k: str(v) for k, v in told[key].items()}) for key in keys})
        except (TypeError, KeyError, AttributeError) as fault:
            raise InputError(
                "codes of a label are not as written", found=str(told)[:60], expected="category and kind"
            ) from fault
