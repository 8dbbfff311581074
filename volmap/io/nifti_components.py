"""NIfTI volumes of several numbers a voxel: vectors, symmetric tensors, shares of labels.

nifti1.h (2003-2019): vectors that are no displacements have intent 1007 (VECTOR), symmetric matrices 1005
(SYMMATRIX) with ``dim[5] = N (N + 1) / 2``, ``intent_p1 = N`` and the lower triangle stored row after row:
xx, yx, yy, zx, zy, zz.  Both have five dimensions, ``dim = [5, I, J, K, 1, c, 1, 1]``, the component slowest
on disk.  What axes the components run along it does not say; the user does (`Reading.axes`).
"""

from __future__ import annotations

import os
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from volmap.io.nifti import read_frames, write_frames
from volmap.io.nifti_header import DISPVECT, NiftiHeader, files_of, opened, read_header
from volmap.io.reading import AS_IT_IS, Axes, Reading
from volmap.io.stacks import as_float32, scaled
from volmap.types.component_volumes import TensorVolume, VectorVolume
from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level
from volmap.types.grid import Grid
from volmap.types.label_shares import LabelShares

PathLike = str | os.PathLike[str]
ComponentKind = Literal["vectors", "tensors"]
SYMMATRIX, VECTOR = 1005, 1007
_N_COMPONENTS: dict[ComponentKind, int] = {"vectors": 3, "tensors": 6}
_KIND_OF_INTENT: dict[int, ComponentKind] = {VECTOR: "vectors", SYMMATRIX: "tensors"}
_AXES_WORDS: dict[Axes, str] = {
    "world": "the world's axes, RAS+",
    "lps": "the axes of DICOM, LPS+: x and y were turned round",
    "voxels": "the voxel axes i, j, k: they were turned into the world's",
}
_SQUARE = 1e-3  # voxel axes are at right angles when no cosine between them is larger


def kind_by_intent(path: PathLike) -> ComponentKind | None:
    """What the header says a file of several numbers a voxel holds; None for one number, or no such intent.

    Raises
    ------
    InputError
        Not readable as NIfTI, or a displacement field.
    """
    with opened(files_of(path)[0]) as (stream, file):
        header = read_header(stream, file)
    if header.n_frames == 1:
        return None
    _refuse_field(header)
    return _KIND_OF_INTENT.get(header.intent)


def read_components(
    path: PathLike, kind: ComponentKind, reading: Reading = AS_IT_IS
) -> tuple[VectorVolume | TensorVolume, tuple[Finding, ...]]:
    """Vectors or symmetric tensors, components along the world's axes.

    Parameters
    ----------
    path : path
        Of intent 1007 or 1005; or, since the caller says what it is, without intent, of dimensions I x J x K
        x 3 (6) or I x J x K x 1 x 3 (6).
    kind : 'vectors' or 'tensors'
    reading : Reading
        Its `axes` count.

    Raises
    ------
    InputError
        Not readable as NIfTI, a displacement field, other dimensions or another intent, infinite or half
        defined vectors, components along voxel axes that are not at right angles.
    """
    header, stored, _ = read_frames(path, lambda header: (_require(header, kind), ()))
    grid = Grid((header.shape[0], header.shape[1], header.shape[2]), header.affine)
    values = as_float32(scaled(stored, header.slope, header.inter))
    axes = reading.axes or "world"
    if axes != "world":
        values = _turned(values, _basis(grid, axes, header.name))
    noun = VectorVolume if kind == "vectors" else TensorVolume
    sentence = f"components were taken to run along {_AXES_WORDS[axes]}"
    if kind == "tensors":
        sentence += "; their order xx, yx, yy, zx, zy, zz"
    remedy = "" if reading.axes else "NIfTI does not say: if it is otherwise, say --axes lps or voxels"
    told = Finding(Level.NOTE, "axes-of-components", header.name, sentence, remedy)
    return noun(grid, values, "", header.name), (*header.findings, told)


def write_vectors(path: PathLike, volume: VectorVolume, *, overwrite: bool = False) -> None:
    """Write vectors as intent 1007 (VECTOR), float32, components along the world's axes, RAS+.

    Raises
    ------
    InputError
        The place is taken or cannot be written.
    """
    _write(path, volume, VECTOR, 0.0, overwrite)


def write_tensors(path: PathLike, volume: TensorVolume, *, overwrite: bool = False) -> None:
    """Write symmetric tensors as intent 1005 (SYMMATRIX), float32, along the world's axes, RAS+.

    Raises
    ------
    InputError
        The place is taken or cannot be written.
    """
    _write(path, volume, SYMMATRIX, 3.0, overwrite)


def write_shares(path: PathLike, shares: LabelShares, *, overwrite: bool = False) -> None:
    """Write shares of labels: four dimensions, one frame a label in the order of `shares.labels`.

    Raises
    ------
    InputError
        The place is taken or cannot be written, or there is no label.
    """
    if not shares.labels:
        raise InputError("there is no label to write shares of", where=shares.name)
    write_frames(
        path,
        (shares.of_label(label) for label in shares.labels),
        shares.grid,
        dimensions=(*shares.grid.shape, len(shares.labels)),
        dtype=np.float32,
        overwrite=overwrite,
    )


def _write(
    path: PathLike, volume: VectorVolume | TensorVolume, intent: int, parameter: float, overwrite: bool
) -> None:
    n = volume.values.shape[3]
    write_frames(
        path,
        (volume.values[..., c] for c in range(n)),
        volume.grid,
        dimensions=(*volume.grid.shape, 1, n),
        dtype=np.float32,
        intent=intent,
        intent_p1=parameter,
        overwrite=overwrite,
    )


def _refuse_field(header: NiftiHeader) -> None:
    if header.intent == DISPVECT:
        raise InputError(
            "is a displacement field, which says where things go; it is not a thing to carry",
            where=header.name,
            found="intent 1006 (DISPVECT)",
            expected="vectors of intent 1007, or tensors of intent 1005",
            remedy="vectors that only look like displacements need intent 1007 (VECTOR)",
            refused=True,
        )


def _require(header: NiftiHeader, kind: ComponentKind) -> range:
    """All frames, when the file can hold that kind."""
    _refuse_field(header)
    n = _N_COMPONENTS[kind]
    stated = _KIND_OF_INTENT.get(header.intent, kind)
    after = tuple(length for length in header.shape[3:] if length > 1)
    at_fifth = len(header.shape) > 4 and header.shape[4] == n
    if stated != kind or after != (n,) or not (at_fifth or header.shape[3] == n):
        raise InputError(
            f"does not hold {kind}",
            where=header.name,
            found=f"intent {header.intent}, dimensions {' x '.join(map(str, header.shape))}",
            expected=f"dimensions I x J x K x 1 x {n} or I x J x K x {n}",
            refused=True,
        )
    return range(n)


def _basis(grid: Grid, axes: Axes, where: str) -> NDArray[np.float64]:
    """(3, 3) columns: the world's components of a unit vector along each axis."""
    if axes == "lps":
        return np.diag([-1.0, -1.0, 1.0])
    if grid.shear > _SQUARE:
        raise InputError(
            "components cannot run along voxel axes that are not at right angles",
            where=where,
            found=f"a cosine of {grid.shear:.3g} between two of them",
            refused=True,
        )
    return np.asarray(grid.affine[:3, :3] / grid.spacing)


def _turned(values: NDArray[np.float32], basis: NDArray[np.float64]) -> NDArray[np.float32]:
    """Components along the world's axes, plane by plane."""
    turned = np.empty(values.shape, np.float32)
    row, column = list(TensorVolume.ROWS), list(TensorVolume.COLUMNS)
    for i, plane in enumerate(values.astype(np.float64, copy=False)):
        if values.shape[3] == 3:
            turned[i] = plane @ basis.T
            continue
        tensors = np.empty((*plane.shape[:2], 3, 3))
        tensors[..., row, column] = tensors[..., column, row] = plane
        turned[i] = (basis @ tensors @ basis.T)[..., row, column]
    return turned
