"""Which of the things seen matter, how much, and what to do about them.

Where a limit names no source it is common practice and has none.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels import voxels
from volmap.screen.regions import Region, body_box, count_touching
from volmap.screen.results import LabelScreen
from volmap.types.findings import Finding, Level
from volmap.types.volumes import LabelVolume

MOST_LABELS = 64
SPECK_VOXELS = 8  # a cube of 2 x 2 x 2: nothing smaller holds an interior once its boundary is smoothed
SMALLEST_LABEL_VOXELS = 8
NOISE_WARN, NOISE_REFUSE = 1e-3, 0.02  # shares of lonely voxels
SPACING_MM = (0.005, 100.0)  # outside: metres or micrometres taken for millimetres
ODD_SPACING_MM = (0.05, 20.0)
BODY_MM = 5000.0
UNEVEN, VERY_UNEVEN = 1.6, 6.0  # longest over shortest voxel edge
SHEAR = 1e-3
GAP_SLICES = 4
THIN_SHARE = 0.005


def speck_voxels(labels: LabelVolume, edge_mm: float | None) -> int:
    """Pieces and cavities with fewer voxels than this are specks: 8, or half a cube of the mesh edge."""
    edge_voxels = 0.0 if edge_mm is None else 0.5 * edge_mm**3 / labels.grid.voxel_mm3
    return max(SPECK_VOXELS, int(np.ceil(edge_voxels)))


def of_label_set(name: str, present: tuple[int, ...]) -> list[Finding]:
    """No label, or far too many."""
    if not present:
        return [
            Finding(Level.REFUSE, "empty", name, "there is no label above 0", "give the segmented volume")
        ]
    if len(present) <= MOST_LABELS:
        return []
    sentence = f"{len(present)} labels (at most {MOST_LABELS} can be mapped); an intensity image, perhaps"
    return [Finding(Level.REFUSE, "many_labels", name, sentence, "give the segmentation, not the image")]


def of_grid(labels: LabelVolume) -> list[Finding]:
    """The grid's units, evenness and shear."""
    grid, name = labels.grid, labels.name
    least, most = float(grid.spacing.min()), float(grid.spacing.max())
    edges = " x ".join(f"{v:.4g}" for v in grid.spacing)
    found = []
    size = float((grid.spacing * grid.shape).max())
    if least < SPACING_MM[0] or most > SPACING_MM[1] or size > BODY_MM:
        sentence = f"voxels of {edges} mm in a grid of {size:.4g} mm make no sense in millimetres"
        found.append(Finding(Level.REFUSE, "units", name, sentence, "correct the voxel size in the header"))
    elif least < ODD_SPACING_MM[0] or most > ODD_SPACING_MM[1]:
        sentence = f"voxels of {edges} mm are odd for millimetres"
        found.append(Finding(Level.WARN, "units", name, sentence, "check the unit of the header"))
    if most / least > UNEVEN:
        level = Level.WARN if most / least > VERY_UNEVEN else Level.NOTE
        sentence = f"voxels of {edges} mm are uneven; across slices the boundary is known to half a slice"
        found.append(Finding(level, "uneven_voxels", name, sentence))
    if grid.shear > SHEAR:
        sentence = (
            f"the voxel axes are not at right angles (cosine {grid.shear:.3f}); the mesh is sheared too"
        )
        found.append(Finding(Level.WARN, "shear", name, sentence, "resample onto an upright grid"))
    return found


def of_body(labels: LabelVolume, body: NDArray[np.uint16], edge_mm: float | None) -> list[Finding]:
    """All labels together: noise, gaps, flatness, and an edge finer than the voxels."""
    name, found = labels.name, []
    share = float(np.count_nonzero(voxels.lonely_voxels(body)) / np.count_nonzero(body))
    if share > NOISE_WARN:
        level = Level.REFUSE if share > NOISE_REFUSE else Level.WARN
        sentence = (
            f"{100 * share:.2g} % of the labelled voxels differ from nearly all their neighbours (noise)"
        )
        found.append(Finding(level, "noise", name, sentence, "clean the segmentation with a median filter"))
    extent = [s.stop - s.start for s in body_box(body)]
    if min(extent) < 2:
        sentence = f"the labels fill {' x '.join(map(str, extent))} voxels: a flat sheet, no solid"
        found.append(Finding(Level.REFUSE, "flat", name, sentence, "give the whole stack of slices"))
    gaps = voxels.one_voxel_gaps(body)
    if gaps:
        sentence = f"{gaps} background voxels lie between two labels like a crack one voxel wide"
        found.append(Finding(Level.WARN, "gaps", name, sentence, "close it if the parts should touch"))
    if edge_mm is not None and edge_mm < labels.grid.spacing.min():
        sentence = f"the mesh edge of {edge_mm:g} mm is below the voxel size; steps of voxels will be meshed"
        found.append(Finding(Level.WARN, "edge_below_voxel", name, sentence, "use a longer edge"))
    return found


def of_label(
    labels: LabelVolume,
    entry: LabelScreen,
    mask: NDArray[np.bool_],
    origin: NDArray[np.int64],
    cavities: list[Region],
    edge_mm: float | None,
) -> list[Finding]:
    """One label.

    Parameters
    ----------
    mask : bool array
        The label in its box, one voxel of margin around.
    origin : (3,) int64
        Index of the box's first voxel in the whole grid.
    cavities : list of Region
        Those the label encloses most of.
    """
    where = f"{labels.name}, {entry.name}" + (
        "" if entry.name.endswith(f" {entry.label}") else f" ({entry.label})"
    )
    limit = speck_voxels(labels, edge_mm)
    found = _of_size(entry, where, edge_mm)
    found += _of_pieces(entry, mask, where, limit)
    found += _of_cavities(entry, cavities, where, limit)
    found += _of_thickness(labels, entry, where, edge_mm)
    found += _of_missing_slices(labels, mask, origin, where)
    if entry.border:
        sentence = f"reaches the {' and '.join(entry.border)} border of the grid, where it is cut flat"
        remedy = "scan more of it; if it truly ends there, --mend pads the grid"
        found.append(Finding(Level.WARN, "border", where, sentence, remedy))
    if entry.handles > 0:
        sentence = f"has {_count(entry.handles, 'handle')} (tunnels through it)"
        found.append(Finding(Level.NOTE, "handles", where, sentence, "correct it if the organ has none"))
    return found


def _count(n: int, noun: str) -> str:
    return f"{n} {noun}" if n == 1 else f"{n} {noun[:-1] + 'ies' if noun.endswith('y') else noun + 's'}"


def _of_size(entry: LabelScreen, where: str, edge_mm: float | None) -> list[Finding]:
    if entry.voxels < SMALLEST_LABEL_VOXELS:
        sentence = f"has {_count(entry.voxels, 'voxel')}, too few to mesh (at least {SMALLEST_LABEL_VOXELS})"
        return [Finding(Level.REFUSE, "too_small", where, sentence, "remove it, or segment on finer voxels")]
    if edge_mm is not None and entry.volume_mm3 < 20 * edge_mm**3:
        sentence = f"its {entry.volume_mm3:.1f} mm3 give few tets of edge {edge_mm:g} mm"
        return [Finding(Level.WARN, "coarse", where, sentence, "use a shorter edge")]
    return []


def _of_pieces(entry: LabelScreen, mask: NDArray[np.bool_], where: str, limit: int) -> list[Finding]:
    if entry.pieces == 1:
        return []
    found = []
    specks = [n for n in entry.piece_voxels[1:] if n < limit]
    if specks:
        sentence = f"has {_count(len(specks), 'speck')} below {limit} voxels ({sum(specks)} voxels in all)"
        found.append(Finding(Level.WARN, "specks", where, sentence, "--mend drops them"))
    if entry.pieces - len(specks) > 1:
        sizes = ", ".join(map(str, entry.piece_voxels[: min(6, entry.pieces - len(specks))]))
        sentence = f"is in {entry.pieces - len(specks)} pieces (voxels: {sizes})"
        found.append(Finding(Level.NOTE, "pieces", where, sentence, "join them if the organ is one body"))
    touching = entry.pieces - count_touching(mask)
    if touching:
        sentence = f"{_count(touching, 'piece')} touch the rest through an edge or a corner only"
        found.append(Finding(Level.WARN, "edge_contacts", where, sentence, "join or part them by a voxel"))
    return found


def _of_cavities(entry: LabelScreen, cavities: list[Region], where: str, limit: int) -> list[Finding]:
    found = []
    tiny = [c for c in cavities if c.voxels < limit]
    if tiny:
        total = sum(c.voxels for c in tiny)
        sentence = f"encloses {len(tiny)} background specks below {limit} voxels ({total} voxels in all)"
        found.append(Finding(Level.WARN, "cavity_specks", where, sentence, "--mend fills them"))
    if len(cavities) > len(tiny):
        many = _count(len(cavities) - len(tiny), "cavity")
        sentence = f"encloses {many} of background, {entry.cavity_mm3:.1f} mm3"
        remedy = "--mend fills cavities that are not meant"
        found.append(Finding(Level.NOTE, "cavities", where, sentence, remedy))
    return found


def _of_thickness(
    labels: LabelVolume, entry: LabelScreen, where: str, edge_mm: float | None
) -> list[Finding]:
    at = entry.thinnest_at_mm
    if at is None:
        return []
    place = (
        f"near ({at[0]:.1f}, {at[1]:.1f}, {at[2]:.1f}) mm ({_count(entry.thin_voxels, 'voxel')} of that kind)"
    )
    if entry.thinnest_voxels <= 2:
        level = Level.WARN if entry.thin_voxels > THIN_SHARE * entry.voxels else Level.NOTE
        sentence = f"is {_count(entry.thinnest_voxels, 'voxel')} thick {place}"
        remedy = "segment on finer voxels, or use a short edge and look at the mesh there"
        return [Finding(level, "thin", where, sentence, remedy)]
    thick_mm = entry.thinnest_voxels * float(labels.grid.spacing.min())
    if edge_mm is not None and thick_mm < edge_mm:
        sentence = f"is about {thick_mm:.3g} mm thick {place}, thinner than the edge of {edge_mm:g} mm"
        return [Finding(Level.WARN, "thin", where, sentence, f"use an edge of {thick_mm:.2g} mm or less")]
    return []


def _of_missing_slices(
    labels: LabelVolume, mask: NDArray[np.bool_], origin: NDArray[np.int64], where: str
) -> list[Finding]:
    """Empty slices with much the same outline on both sides: slices that were left out, not two pieces."""
    for axis in range(3):
        for first, last in _dropped(mask, axis):
            numbers = [str(int(origin[axis]) + k) for k in range(first, last + 1)]
            sentence = f"has empty slices inside it ({'ijk'[axis]} = {', '.join(numbers)})"
            remedy = "segment those slices, or fill them in by interpolation between their neighbours"
            return [Finding(Level.REFUSE, "empty_slices", where, sentence, remedy)]
    return []


def _dropped(mask: NDArray[np.bool_], axis: int) -> list[tuple[int, int]]:
    slices = np.moveaxis(mask, axis, 0)
    area = slices.sum(axis=(1, 2))
    held = np.flatnonzero(area)
    runs = []
    for before, after in zip(held[:-1].tolist(), held[1:].tolist(), strict=True):
        if not 1 < after - before <= GAP_SLICES + 1:
            continue
        both = 2.0 * np.count_nonzero(slices[before] & slices[after]) / (area[before] + area[after])
        if both >= 0.5 and min(area[before], area[after]) >= 0.25 * area.max():
            runs.append((before + 1, after - 1))
    return runs
