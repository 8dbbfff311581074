"""DICOM objects made by pydicom and highdicom, for tests of our readers: writers that are not ours.

Places are given as DICOM does, LPS, mm; ``affine[:, 0]`` is the step from plane to plane, ``affine[:, 1]``
from row to row, ``affine[:, 2]`` along a row (highdicom's order of a volume's axes).
"""

from __future__ import annotations

from pathlib import Path

import highdicom as hd
import numpy as np
import pydicom
from highdicom.seg import Segmentation, SegmentDescription
from pydicom.dataset import FileDataset, FileMetaDataset
from pydicom.sr.codedict import codes
from pydicom.uid import CTImageStorage, ExplicitVRLittleEndian, generate_uid

TURN = np.array(
    [[0.8, -0.6, 0.0], [0.48, 0.64, -0.6], [0.36, 0.48, 0.8]]
)  # rows are a rational right-handed frame


def affine_of(
    directions: np.ndarray, spacing_mm: tuple[float, float, float], origin: tuple[float, float, float]
) -> np.ndarray:
    """(4, 4) of directions (rows: plane step, row step, column step), spacings in that order, and origin."""
    affine = np.eye(4)
    affine[:3, :3] = (np.asarray(directions, float) * np.array(spacing_mm)[:, None]).T
    affine[:3, 3] = origin
    return affine


AXIAL = np.array([[0, 0, 1], [0, 1, 0], [1, 0, 0]], float)  # planes up, rows to the back, columns to the left
SAGITTAL = np.array([[1, 0, 0], [0, 0, -1], [0, 1, 0]], float)
CORONAL = np.array([[0, 1, 0], [0, 0, -1], [1, 0, 0]], float)
DOWNWARD = np.array([[0, 0, -1], [0, 1, 0], [1, 0, 0]], float)  # a left-handed stack
PLACES = {
    "axial": affine_of(AXIAL, (3.0, 0.7, 0.9), (-40.0, -31.5, 12.25)),
    "sagittal": affine_of(SAGITTAL, (1.5, 0.8, 1.25), (10.0, -20.0, 33.0)),
    "coronal": affine_of(CORONAL, (2.0, 1.0, 0.5), (-15.0, 4.0, 71.0)),
    "oblique": affine_of(TURN, (2.5, 0.625, 1.0), (5.5, -60.25, 8.0)),
    "downward": affine_of(DOWNWARD, (3.0, 0.7, 0.9), (-40.0, -31.5, 12.25)),
    "oblique downward": affine_of(TURN * [[-1], [1], [1]], (2.5, 0.625, 1.0), (5.5, -60.25, 8.0)),
}


def slices(
    affine: np.ndarray, stored: np.ndarray, *, slope: float = 1.0, intercept: float = 0.0
) -> list[FileDataset]:
    """One CT data set a plane of (planes, rows, columns) int16, of one series of an invented test object."""
    study, series, frame = generate_uid(), generate_uid(), generate_uid()
    step, down, along = (affine[:3, axis] for axis in range(3))
    sets = []
    for k, plane in enumerate(stored):
        uid = generate_uid()
        meta = FileMetaDataset()
        meta.MediaStorageSOPClassUID, meta.MediaStorageSOPInstanceUID = CTImageStorage, uid
        meta.TransferSyntaxUID = ExplicitVRLittleEndian
        ds = FileDataset("", {}, file_meta=meta, preamble=b"\0" * 128)
        ds.SOPClassUID, ds.SOPInstanceUID, ds.Modality = CTImageStorage, uid, "CT"
        ds.StudyInstanceUID, ds.SeriesInstanceUID, ds.FrameOfReferenceUID = study, series, frame
        ds.PatientName, ds.PatientID, ds.PatientBirthDate, ds.PatientSex = (
            "Test^Object",
            "T1",
            "19000101",
            "O",
        )
        ds.StudyDate, ds.StudyTime, ds.AcquisitionDate = "20200101", "120000", "20200101"
        ds.AccessionNumber, ds.StudyID, ds.ReferringPhysicianName = "1", "1", ""
        ds.SeriesNumber, ds.InstanceNumber, ds.PositionReferenceIndicator = 1, k + 1, ""
        ds.ImagePositionPatient = [float(v) for v in affine[:3, 3] + k * step]
        ds.ImageOrientationPatient = [
            float(v) for v in (*(along / np.linalg.norm(along)), *(down / np.linalg.norm(down)))
        ]
        ds.PixelSpacing = [float(np.linalg.norm(down)), float(np.linalg.norm(along))]
        ds.SliceThickness = float(np.linalg.norm(step))
        ds.Rows, ds.Columns, ds.SamplesPerPixel = *plane.shape, 1
        ds.PhotometricInterpretation, ds.PixelRepresentation = "MONOCHROME2", 1
        ds.BitsAllocated, ds.BitsStored, ds.HighBit = 16, 16, 15
        ds.RescaleSlope, ds.RescaleIntercept = slope, intercept
        ds.PixelData = np.ascontiguousarray(plane, "<i2").tobytes()
        sets.append(ds)
    return sets


def segmentation(affine: np.ndarray, labels: np.ndarray, kind: str, **more: object) -> Segmentation:
    """A segmentation object by highdicom of (planes, rows, columns[, segments]) labels."""
    sources = slices(affine, np.zeros(labels.shape[:3], np.int16))
    n = labels.shape[3] if labels.ndim == 4 else int(labels.max())
    kinds = (codes.SCT.Liver, codes.SCT.Spleen, codes.SCT.Kidney)
    region = [codes.SCT.Abdomen]
    about = [
        SegmentDescription(
            m, f"part {m}", codes.SCT.Organ, kinds[m % 3], "MANUAL", anatomic_regions=region
        )
        for m in range(1, n + 1)
    ]  # fmt: skip
    channels = {"SegmentNumber": range(1, n + 1)} if labels.ndim == 4 else None
    volume = hd.Volume(
        labels, affine, "PATIENT", frame_of_reference_uid=sources[0].FrameOfReferenceUID, channels=channels
    )
    return Segmentation(
        sources,
        volume,
        kind,
        about,
        generate_uid(),
        2,
        generate_uid(),
        1,
        "a test",
        "a test",
        "1",
        "1",
        **more,
    )


def some_labels(shape: tuple[int, int, int], n: int, seed: int) -> np.ndarray:
    """(planes, rows, columns) uint8 of n labels scattered at random, an empty plane inside among them."""
    labels = np.random.default_rng(seed).integers(0, n + 1, shape).astype(np.uint8)
    labels[shape[0] // 2] = 0
    return labels


def saved(sets: list[FileDataset], folder: Path, *, names: str = "slice_{:03d}") -> Path:
    """The data sets as files of a folder, without endings."""
    folder.mkdir(exist_ok=True)
    for k, ds in enumerate(sets):
        pydicom.dcmwrite(folder / names.format(k), ds, enforce_file_format=True)
    return folder


def to_ras(points: np.ndarray) -> np.ndarray:
    """LPS to RAS+: x and y change sign."""
    return points * [-1.0, -1.0, 1.0]
