"""From stored numbers to what they stand for: the linear Modality LUT, and the unit it gives."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.dicom.fields import items, reals, text
from volmap.io.dicom.geometry import FunctionalGroups
from volmap.types.errors import InputError


@dataclass(frozen=True)
class Scale:
    """``value = slope * stored + intercept``.

    Parameters
    ----------
    slope, intercept : float
    unit : str
    """

    slope: float = 1.0
    intercept: float = 0.0
    unit: str = ""

    def applied(self, stored: NDArray[Any]) -> NDArray[np.float32]:
        """(rows, columns) float32."""
        return (stored * self.slope + self.intercept).astype(np.float32)


def scale_of_image(ds: Any, where: str) -> Scale:
    """The Modality LUT of an image (PS3.3 C.11.1), or the dose grid's scaling (C.8.8.3).

    Raises
    ------
    InputError
        A table in place of a line, or numbers that are nonsense.
    """
    if items(ds, "ModalityLUTSequence", where):
        raise InputError(
            "maps its stored numbers through a table (Modality LUT)", where=where,
            expected="Rescale Slope and Intercept", remedy="export the values themselves", refused=True,
        )  # fmt: skip
    if "DoseGridScaling" in ds:
        return _line(ds, ("DoseGridScaling", ""), text(ds, "DoseUnits", where).capitalize(), where)
    return _line(ds, ("RescaleSlope", "RescaleIntercept"), _unit(ds, ds, where), where)


def scale_of_frames(ds: Any, groups: FunctionalGroups) -> list[Scale]:
    """The Pixel Value Transformation of every frame (PS3.3 C.7.6.16.2.9); none changes nothing.

    Raises
    ------
    InputError
        Numbers that are nonsense, or units that differ.
    """
    scales: list[Scale] = []
    for n in range(groups.n_frames):
        told = groups.of(n, "PixelValueTransformationSequence")
        at = groups.name_of(n)
        if told is None:
            scales.append(Scale())
        else:
            scales.append(_line(told, ("RescaleSlope", "RescaleIntercept"), _unit(told, ds, at), at))
        if scales[-1].unit != scales[0].unit:
            raise InputError("holds frames in different units", where=at, refused=True)
    return scales


def _line(ds: Any, keywords: tuple[str, str], unit: str, where: str) -> Scale:
    slope = reals(ds, keywords[0], 1, where)
    intercept = reals(ds, keywords[1], 1, where) if keywords[1] else None
    if slope is not None and slope[0] == 0:
        raise InputError(f"its {keywords[0]} is nonsense", where=where, found="0", remedy="export it again")
    return Scale(
        1.0 if slope is None else float(slope[0]), 0.0 if intercept is None else float(intercept[0]), unit
    )


def _unit(told: Any, ds: Any, where: str) -> str:
    """Rescale Type; left out in CT it is HU (C.8.2.1.1); in PET the Units (C.8.9.1); US says unspecified."""
    kind, modality = text(told, "RescaleType", where), text(ds, "Modality", where)
    if not kind and modality == "CT" and "RescaleSlope" in told:
        return "HU"
    if not kind and modality == "PT":
        kind = text(ds, "Units", where)
    return "" if kind == "US" else kind[:16]
