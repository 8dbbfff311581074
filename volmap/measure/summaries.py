"""A row of measures for each region."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.statistics import weighted_mean, weighted_quantiles
from volmap.measure.regions import Region
from volmap.measure.reliability import REASONS, Reliability
from volmap.measure.uncertainty import VolumeUncertainty
from volmap.types import Column, Table, VolumeMap

Floats = NDArray[np.float64]
SHARES = {"p1": 0.01, "p50": 0.50, "p99": 0.99}
STRETCHES = ("stretch_largest", "stretch_middle", "stretch_smallest")
WORDS = ("name", "drawn_in", "verdict", "failed_gates", "uncertainty_from")

BY_RESIDUAL = (
    "boundary residual: how far the map's surface of the label lies from the scan's own surface, in both "
    "scans; not in it: errors of the segmentations themselves, and what voxels cannot show"
)
BY_BOUNDARY = "boundary residual: what the smoothest displacement that mends the labels' surfaces does to it"
BY_ORDERS = "two orders: its change by the solve on one mesh less that on the other, each on its own"
NOT_IN_IT = "not in it: what neither scan shows inside, and errors of the segmentations"


@dataclass(frozen=True)
class ChangeUncertainty:
    """What is known of the error of a region's change of volume.

    Parameters
    ----------
    source, target : VolumeUncertainty, optional
        Of the label's volume in each world, from its boundary residual.
    boundary_mm3, orders_mm3 : float
        For a region that is no label, NaN when not known: change of its change when the labels' surfaces are
        mended (see `inner_residual`), and its change by one solve less that by the other.
    """

    source: VolumeUncertainty | None = None
    target: VolumeUncertainty | None = None
    boundary_mm3: float = float("nan")
    orders_mm3: float = float("nan")


@dataclass(frozen=True)
class _Cell:
    name: str
    unit: str
    value: float | int | str
    meaning: str


def region_table(
    volume_map: VolumeMap,
    regions: Sequence[Region],
    *,
    reliable: Reliability,
    uncertainties: Sequence[ChangeUncertainty],
    verdict: str,
    about: Mapping[str, object],
) -> Table:
    """One row a region; units in the headers.

    Parameters
    ----------
    volume_map : VolumeMap
    regions : sequence of Region
    reliable : Reliability
    uncertainties : sequence of ChangeUncertainty
        One a region.
    verdict : str
        Of the map's certificate.
    about : mapping
        Put into the table as it is.
    """
    failed = " ".join(reliable.failed_gates)
    rows = [
        [
            _Cell("region", "", region.number, "Number of the region in its label volume."),
            _Cell("name", "", region.name, "Its name."),
            _Cell("drawn_in", "", " ".join(region.drawn_mm3), "The scan in which it was drawn."),
            _Cell("verdict", "", verdict, "What the map's certificate says: pass, warn or fail."),
            _Cell("failed_gates", "", failed, "Gates of the certificate that failed."),
            *_volumes(volume_map, region),
            *_change(volume_map, region, uncertainty),
            *_left_out(region, reliable),
            *_statistics(volume_map, region, reliable.tets),
        ]
        for region, uncertainty in zip(regions, uncertainties, strict=True)
    ]
    return Table(tuple(_column(cells) for cells in zip(*rows, strict=True)), dict(about))


def long_form(table: Table) -> Table:
    """One row a region and measure: region, name, verdict, measure, unit, value."""
    kept = ("region", "name", "drawn_in", "verdict", "failed_gates")
    numbers = [c for c in table.columns if c.name not in (*kept, *WORDS)]
    n = len(table)
    own = [_repeated(c, len(numbers)) for c in table.columns if c.name in kept]
    values = np.stack([np.asarray(c.values, np.float64) for c in numbers], axis=1).ravel()
    added = (
        Column("measure", tuple(c.name for c in numbers) * n, "", "Header of the wide table without unit."),
        Column("unit", tuple(c.unit for c in numbers) * n, "", "Unit of the value; 1 for a ratio."),
        Column("value", values, "", "In the unit beside it."),
    )
    return Table((*own, *added), table.about)


def _repeated(column: Column, times: int) -> Column:
    values = column.values
    if isinstance(values, np.ndarray):
        return Column(column.name, np.repeat(values, times), column.unit, column.meaning)
    return Column(column.name, tuple(v for v in values for _ in range(times)), column.unit, column.meaning)


def _column(cells: Sequence[_Cell]) -> Column:
    first = cells[0]
    values = [cell.value for cell in cells]
    if first.name in WORDS:
        return Column(first.name, tuple(str(v) for v in values), first.unit, first.meaning)
    kind = np.int64 if first.name == "region" else np.float64
    return Column(first.name, np.array(values, kind), first.unit, first.meaning)


def _volumes(volume_map: VolumeMap, region: Region) -> list[_Cell]:
    here, there = _both_volumes(volume_map, region)
    of = "Volume of the region in the tets of the map, in {}; exact for a label."
    by = "Volume of its voxels as drawn in {}; empty where it was not drawn."
    return [
        _Cell("volume_source", "mm3", here, of.format("SOURCE")),
        _Cell("volume_target", "mm3", there, of.format("TARGET")),
        _Cell("volume_source_voxels", "mm3", region.drawn_mm3.get("source", np.nan), by.format("SOURCE")),
        _Cell("volume_target_voxels", "mm3", region.drawn_mm3.get("target", np.nan), by.format("TARGET")),
    ]


def _both_volumes(volume_map: VolumeMap, region: Region) -> tuple[float, float]:
    here = region.source_mm3
    return float(here.sum()), float((here * volume_map.volume_ratio[region.tets]).sum())


def mended_mm3(volume_map: VolumeMap, region: Region, source: Floats, target: Floats) -> float:
    """By how much the change of a drawn region changes when the labels' surfaces are mended.

    Parameters
    ----------
    volume_map : VolumeMap
    region : Region
        Stays as drawn: what is mended is where the map sends it.
    source, target : (m,) float64
        `inner_residual.mending_divergence` in both worlds.

    Returns
    -------
    float
        mm3, six digits: `gain` was solved for to 1e-8, and its last bits hang on the machine's threads.
    """
    gain = (target - source)[region.tets]
    there = region.source_mm3 * volume_map.volume_ratio[region.tets]
    mended = float((gain * (there if "source" in region.drawn_mm3 else region.source_mm3)).sum())
    return float(f"{mended:.6g}")


def change_mm3(volume_map: VolumeMap, region: Region) -> float:
    """Volume in TARGET less volume in SOURCE."""
    here, there = _both_volumes(volume_map, region)
    return there - here


def _change(volume_map: VolumeMap, region: Region, uncertainty: ChangeUncertainty) -> list[_Cell]:
    here, there = _both_volumes(volume_map, region)
    standard, percent, bound, source = _uncertainty(
        here, there, uncertainty, drawn_in_source="source" in region.drawn_mm3
    )
    before, after = (region.drawn_mm3.get(side, np.nan) for side in ("source", "target"))
    drawn = after - before
    own = [np.nan if u is None else u.difference_mm3 for u in (uncertainty.source, uncertainty.target)]
    apart = "What the scan's own surface of the label holds more than the map's solid, in {}; to first order."
    return [
        _Cell("volume_change", "mm3", there - here, "Volume in TARGET less volume in SOURCE."),
        _Cell("volume_change", "percent", _percent(there - here, here), "The same in % of SOURCE."),
        _Cell("volume_change_voxels", "mm3", drawn, "The change by voxels as drawn; empty unless in both."),
        _Cell("volume_change_voxels", "percent", _percent(drawn, before), "The same in % of SOURCE."),
        _Cell("volume_change_uncertainty", "mm3", standard, "Standard uncertainty of the change."),
        _Cell("volume_change_uncertainty", "percent", percent, "The same, of the change in %."),
        _Cell("volume_change_bound", "mm3", bound, "What the same residual could do at most."),
        _Cell(
            "uncertainty_from", "", source, "What the uncertainty was derived from, and what it leaves out."
        ),
        _Cell("boundary_difference_source", "mm3", own[0], apart.format("SOURCE")),
        _Cell("boundary_difference_target", "mm3", own[1], apart.format("TARGET")),
    ]


def _uncertainty(
    here: float, there: float, known: ChangeUncertainty, *, drawn_in_source: bool
) -> tuple[float, float, float, str]:
    """Standard uncertainty of the change in mm3 and in %, its bound, and where they come from.

    Errors of the two scans are taken as independent: their squares add up; bounds add up as they are.  What
    is known of the change, the one difference less the other, is covered in any case (they may point in
    opposite ways).  The change in % is 100 (there / here - 1), and its error follows to first order.  A
    region that is no label is as large as it was drawn, where it was drawn; the error is that of its other
    volume.
    """
    if known.source is not None and known.target is not None:
        a, b = known.source.standard_mm3, known.target.standard_mm3
        before, after = known.source.difference_mm3, known.target.difference_mm3
        ratio = there / here if here else np.nan
        relative = _percent(max(float(np.hypot(b, a * ratio)), abs(after - before * ratio)), here)
        bound = known.source.bound_mm3 + known.target.bound_mm3
        return max(float(np.hypot(a, b)), abs(after - before)), relative, bound, BY_RESIDUAL
    parts = {BY_BOUNDARY: known.boundary_mm3, BY_ORDERS: known.orders_mm3}
    parts = {words: value for words, value in parts.items() if np.isfinite(value)}
    if not parts:
        return np.nan, np.nan, np.nan, "not assessed"
    apart = float(np.linalg.norm(list(parts.values())))
    relative = _percent(apart if drawn_in_source else apart * there / here, here)
    return apart, relative, np.nan, "; ".join((*parts, NOT_IN_IT))


def _percent(part: float, whole: float) -> float:
    return 100.0 * part / whole if whole > 0 else float("nan")


def _left_out(region: Region, reliable: Reliability) -> list[_Cell]:
    whole = float(region.source_mm3.sum())
    drawn = next(iter(region.drawn_mm3.values())) if not region.is_label else np.nan
    inside = 100.0 if region.is_label else _percent(drawn - region.outside_mm3, drawn)
    kept = float(region.source_mm3[reliable.tets[region.tets]].sum())
    cells = [
        _Cell("inside", "percent", inside, "Part of the drawn region that lies in the map's mesh."),
        _Cell("reliable", "percent", _percent(kept, whole), "Part of the volume in SOURCE that is reliable."),
    ]
    for name, bad in zip(REASONS, reliable.against[region.tets].T, strict=True):
        share = (
            np.nan if name in reliable.not_assessed else _percent(float(region.source_mm3[bad].sum()), whole)
        )
        meaning = f"Part that is not reliable because: {REASONS[name]}."
        cells.append(_Cell(f"left_out_{name}", "percent", share, meaning))
    return cells


def _statistics(volume_map: VolumeMap, region: Region, good: NDArray[np.bool_]) -> list[_Cell]:
    ratio, stretches = volume_map.volume_ratio[region.tets], volume_map.stretches[region.tets]
    quantities = {"volume_ratio": ratio} | dict(zip(STRETCHES, stretches.T, strict=True))
    kept = good[region.tets]
    cells = []
    for rows, tail, of in ((np.ones_like(kept), "", ""), (kept, "_reliable", ", reliable tets only")):
        weights = region.source_mm3[rows]
        there = float((weights * ratio[rows]).sum())
        if tail:
            cells += [
                _Cell(f"volume_source{tail}", "mm3", float(weights.sum()), f"Volume in SOURCE{of}."),
                _Cell(f"volume_target{tail}", "mm3", there, f"Volume in TARGET{of}."),
            ]
        for name, values in quantities.items():
            found = _summary(values[rows], weights)
            words = name.replace("_", " ")
            cells += [
                _Cell(
                    f"{name}_{key}{tail}",
                    "1",
                    value,
                    f"{key} of the {words}, weighted by volume in SOURCE{of}.",
                )
                for key, value in found.items()
            ]
        logs = weighted_mean(np.log(ratio[rows]), weights) if _positive(ratio[rows]) else np.nan
        meaning = f"Mean of the natural logarithm of the volume ratio, weighted by volume in SOURCE{of}."
        cells.append(_Cell(f"log_volume_ratio_mean{tail}", "1", logs, meaning))
    return cells


def _positive(values: Floats) -> bool:
    return len(values) > 0 and bool((values > 0).all())


def _summary(values: Floats, weights: Floats) -> dict[str, float]:
    """p1, p50, p99, mean, smallest and largest; NaN of nothing."""
    if not len(values) or not weights.sum() > 0:
        return dict.fromkeys((*SHARES, "mean", "min", "max"), float("nan"))
    found = dict(zip(SHARES, weighted_quantiles(values, weights, tuple(SHARES.values())), strict=True))
    ends = {"min": float(values.min()), "max": float(values.max())}
    return found | {"mean": weighted_mean(values, weights)} | ends
