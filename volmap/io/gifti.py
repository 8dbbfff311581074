"""Surfaces and values on their points as GIFTI (open format 1.0 of the NITRC working group, 2011).

Coordinates are world millimetres, RAS+, float32 as the format wants them; each point set says so by an
identity transform from and to NIFTI_XFORM_SCANNER_ANAT.  No date, user or path is written.
"""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.atomic import whole_file
from volmap.io.opening import shown_name
from volmap.types.errors import InputError
from volmap.types.notice import caution

PathLike = str | os.PathLike[str]
SURFACE, VALUES = ".surf.gii", ".shape.gii"


def write_gifti_surface(
    path: PathLike,
    points: NDArray[np.float64],
    triangles: NDArray[np.int64],
    *,
    name: str,
    description: str,
    overwrite: bool = False,
) -> None:
    """Write one surface.

    Parameters
    ----------
    path : path
        Ends in .surf.gii.
    points : (n, 3) float64, mm, RAS+
    triangles : (m, 3) int64
        Counter-clockwise seen from outside.
    name, description : str
        What it is; in the file's metadata.

    Raises
    ------
    InputError
        Another ending, a place that is taken or cannot be written, too many points.
    """
    if len(points) > np.iinfo(np.int32).max:
        raise InputError("has too many points for GIFTI", where=shown_name(path), found=str(len(points)))
    space = _gifti().GiftiCoordSystem("NIFTI_XFORM_SCANNER_ANAT", "NIFTI_XFORM_SCANNER_ANAT", np.eye(4))
    arrays = [
        _array(points, "NIFTI_INTENT_POINTSET", np.float32, {"Name": name}, coordsys=space),
        _array(triangles, "NIFTI_INTENT_TRIANGLE", np.int32, {"Name": name}),
    ]
    _write(path, SURFACE, arrays, name, description, overwrite)


def write_gifti_values(
    path: PathLike,
    values: Mapping[str, NDArray[np.float64]],
    *,
    name: str,
    description: str,
    overwrite: bool = False,
) -> None:
    """Write values on the points of a surface, an array a name.

    Parameters
    ----------
    path : path
        Ends in .shape.gii.
    values : mapping of str to (n,) float64
        NaN where a point has none.
    name, description : str

    Raises
    ------
    InputError
        As `write_gifti_surface`.
    """
    arrays = [_array(array, "NIFTI_INTENT_SHAPE", np.float32, {"Name": key}) for key, array in values.items()]
    _write(path, VALUES, arrays, name, description, overwrite)


def _gifti() -> Any:
    """nibabel's part for GIFTI; imported when it is needed."""
    import nibabel

    return nibabel.gifti


def _array(
    values: NDArray[Any], intent: str, dtype: type[np.generic], meta: dict[str, str], *, coordsys: Any = None
) -> Any:
    return _gifti().GiftiDataArray(
        np.ascontiguousarray(values, dtype),
        intent=intent,
        datatype="NIFTI_TYPE_FLOAT32" if dtype is np.float32 else "NIFTI_TYPE_INT32",
        encoding="GIFTI_ENCODING_B64GZ",
        endian="little",
        coordsys=coordsys,
        meta=meta,
    )


def _write(
    path: PathLike, ending: str, arrays: list[Any], name: str, description: str, overwrite: bool
) -> None:
    if not Path(path).name.endswith(ending):
        raise InputError("is no name for this kind of GIFTI file", where=shown_name(path), expected=ending)
    meta = {"Name": name, "Description": f"{description} World coordinates, RAS+, mm. {caution()}"}
    image = _gifti().GiftiImage(darrays=arrays, meta=_gifti().GiftiMetaData(meta))
    with whole_file(path, overwrite=overwrite) as temporary:
        temporary.write_bytes(image.to_bytes())
