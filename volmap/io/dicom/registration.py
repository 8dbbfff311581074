"""Deformable Spatial Registration (PS3.3, A.39.2 and C.20.3): a field as DICOM stores it.

The object is a pull.  A point X of the registered frame of reference, (0020,0052), finds its source at
``X' = M_post (M_pre X + D(M_pre X))`` in Source Frame of Reference, (0064,0003): mm, LPS.  Both matrices are
the identity here, and D is read off a grid that lies in the registered frame; NaN triples are undefined.  So
the object that brings images of SOURCE into TARGET's frame holds the field on TARGET's grid.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from volmap.io.dicom.laying import Laid, laid
from volmap.io.dicom.object_head import PathLike, begun, put, text
from volmap.io.dicom.uids import ScanUids
from volmap.types.errors import InputError
from volmap.types.gridfield import GridField

if TYPE_CHECKING:
    from pydicom.dataset import Dataset

SOP_CLASS = "1.2.840.10008.5.1.4.1.1.66.3"
_LPS = np.array([-1.0, -1.0, 1.0])
_LARGEST_BYTES = 2**32 - 2


@dataclass(frozen=True)
class CheckedPoint:
    """One voxel centre with its numbers, by which anybody can tell whether the field is read as meant.

    Parameters
    ----------
    voxel : tuple of 3 int
        In the grid of the object, from 0.
    registered_mm, source_mm : tuple of 3 float
        The point in the registered frame and in the source frame, LPS.
    """

    voxel: tuple[int, int, int]
    registered_mm: tuple[float, float, float]
    source_mm: tuple[float, float, float]

    @property
    def short(self) -> str:
        """At most 64 characters."""
        here, there = (",".join(f"{v:.2f}" for v in p) for p in (self.registered_mm, self.source_mm))
        return f"({here}) from ({there}) LPS mm"

    @property
    def sentence(self) -> str:
        """All digits that float32 can hold."""
        here, there = (", ".join(f"{v:.5f}" for v in p) for p in (self.registered_mm, self.source_mm))
        return f"Check: grid point {self.voxel} at ({here}) mm, LPS, comes from ({there}) mm, LPS."


def write_registration(
    path: PathLike,
    field: GridField,
    *,
    registered: ScanUids,
    source: ScanUids,
    check_voxel: tuple[int, int, int],
    roles: tuple[str, str] = ("SOURCE", "TARGET"),
    overwrite: bool = False,
) -> CheckedPoint:
    """Write a field as a Deformable Spatial Registration.

    Parameters
    ----------
    path : path
        Ends in .dcm.
    field : GridField
        On a grid of the scan that images are brought to; it points into the scan whose images are brought.
    registered, source : ScanUids
        Of the scan the field's grid is in, and of the scan it points into.
    check_voxel : tuple of 3 int
        A voxel of `field` where it is defined; its numbers are written into the object.
    roles : (str, str)
        What the source and the registered scan are called in words.
    overwrite : bool

    Returns
    -------
    CheckedPoint
        As written.

    Raises
    ------
    InputError
        The place is taken or cannot be written, axes that are not orthogonal, a field too large for one
        attribute, one frame of reference for both.
    """
    if field.displacement.nbytes > _LARGEST_BYTES:
        raise InputError(
            "the field is too large for a DICOM attribute",
            where="VectorGridData",
            found=f"{field.displacement.nbytes} bytes",
            expected=f"at most {_LARGEST_BYTES}",
            remedy="map scans with fewer voxels",
        )
    if registered.frame == source.frame:
        raise InputError(
            "both scans have one frame of reference, so nothing would say which images are to be moved",
            where=source.frame,
            expected="two different ones",
            remedy="leave the frames out (new ones are made), or give one scan's images a frame of their own",
            refused=True,
        )
    grid = laid(field.grid, where="the field")
    check = _checked(field, grid, check_voxel)
    a, b = roles
    told = (
        f"Brings images of {a} into the frame of reference of {b}: a point X of {b} takes its value from "
        f"X + D(X) in {a} (mm, LPS); undefined where NaN. {check.sentence} "
        f"Frame of reference of {a}: {source.origin}; of {b}: {registered.origin}."
    )
    made = begun(
        registered, sop_class=SOP_CLASS, modality="REG", description=f"{a} into the frame of {b}", told=told
    )
    made.ContentLabel = "REGISTRATION"
    made.Laterality = ""  # C.7.3.1, Type 2C: nobody knows whether the body is one of a pair
    made.DeformableRegistrationSequence = [_item(field, grid, source, check)]
    put(path, made, overwrite=overwrite)
    return check


def _item(field: GridField, grid: Laid, source: ScanUids, check: CheckedPoint) -> Dataset:
    from pydicom.dataset import Dataset

    made = Dataset()
    made.SourceFrameOfReferenceUID = source.frame
    made.FrameOfReferenceTransformationComment = text(check.short, "LO")
    made.RegistrationTypeCodeSequence = []
    made.PreDeformationMatrixRegistrationSequence = [_identity()]
    made.PostDeformationMatrixRegistrationSequence = [_identity()]
    made.DeformableRegistrationGridSequence = [_grid(field, grid)]
    return made


def _identity() -> Dataset:
    from pydicom.dataset import Dataset

    made = Dataset()
    made.FrameOfReferenceTransformationMatrixType = "RIGID"
    made.FrameOfReferenceTransformationMatrix = [str(v) for v in np.eye(4, dtype=int).ravel()]
    return made


def _grid(field: GridField, grid: Laid) -> Dataset:
    """C.20.3.1.3: triples of float32, x of the grid fastest, then y, then z."""
    from pydicom.dataset import Dataset

    made = Dataset()
    made.ImageOrientationPatient = grid.orientation
    made.ImagePositionPatient = grid.position()
    made.GridDimensions = list(grid.shape)
    made.GridResolution = grid.spacing.tolist()
    triples: Any = grid.in_order(field.displacement) * _LPS.astype(np.float32)
    triples[np.isnan(triples)] = np.nan  # one bit pattern
    made.VectorGridData = triples.transpose(2, 1, 0, 3).astype("<f4", copy=False).tobytes()
    return made


def _checked(field: GridField, grid: Laid, voxel: tuple[int, int, int]) -> CheckedPoint:
    i, j, k = voxel
    x = field.grid.to_world(np.array([voxel], np.float64))[0] * _LPS
    y = x + field.displacement[voxel].astype(np.float64) * _LPS
    here = (i, j, grid.place(k))
    return CheckedPoint(
        here, (float(x[0]), float(x[1]), float(x[2])), (float(y[0]), float(y[1]), float(y[2]))
    )
