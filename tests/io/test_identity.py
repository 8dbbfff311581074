"""Names of identifying fields, and nothing of what stands in them.

The table `identifying.toml` is from memory of PS3.15 (2024), table E.1-1.  The attributes below were typed in
for this test apart from it, from the categories that PS3.15 E.1 commonly names: a check, no copy.
"""

from __future__ import annotations

import gzip
import json
from pathlib import Path

import nibabel as nib
import nrrd
import numpy as np
import pydicom
import pytest
from dicom_scene import PLACES, saved, segmentation, slices
from pydicom.data import get_testdata_file
from pydicom.datadict import dictionary_VR, tag_for_keyword
from volmap_cli.main import main

from volmap.io.identifying_kinds import identifying_kinds
from volmap.io.identity import days_apart, identifying_fields
from volmap.io.nifti import write_labels
from volmap.types import Grid, LabelVolume, Level

MARK = "zzmark"
EXPECTED = {
    "person": {"PatientName", "PatientID", "PatientBirthDate", "OtherPatientNames", "ReferringPhysicianName",
               "OperatorsName", "AccessionNumber", "ContentCreatorName", "PatientAddress", "PersonName"},
    "body": {"PatientAge", "PatientWeight", "EthnicGroup"},
    "dates": {"StudyDate", "StudyTime", "AcquisitionDateTime", "SeriesDate",
              "ScheduledProcedureStepStartDate"},
    "place": {"InstitutionName", "InstitutionalDepartmentName", "InstitutionAddress"},
    "device": {"DeviceSerialNumber", "StationName", "DetectorID", "SourceApplicationEntityTitle"},
    "uids": {"StudyInstanceUID", "SeriesInstanceUID", "SOPInstanceUID", "FrameOfReferenceUID",
             "ReferencedSOPInstanceUID", "MediaStorageSOPInstanceUID"},
    "words": {"StudyDescription", "SeriesDescription", "ProtocolName", "ImageComments", "PatientComments"},
    "pictures": {"BurnedInAnnotation", "IconImageSequence"},
    "private": {"(0009,xxxx)", "the 128 bytes before the object"},
}  # fmt: skip


def marked(ds: pydicom.Dataset) -> pydicom.Dataset:
    """An object with each of EXPECTED, some inside a sequence, and no other of these fields."""
    deep = pydicom.Dataset()
    person = pydicom.Dataset()
    person.PersonName = MARK
    deep.AuthorObserverSequence = [person]
    deep.ReferencedSOPInstanceUID, deep.ScheduledProcedureStepStartDate = "1.2.777.5", "20170823"
    ds.RequestAttributesSequence = [deep]
    for keyword in (
        "PatientName", "PatientID", "OtherPatientNames", "ReferringPhysicianName", "OperatorsName",
        "AccessionNumber", "ContentCreatorName", "PatientAddress", "EthnicGroup", "InstitutionName",
        "InstitutionalDepartmentName", "InstitutionAddress", "DeviceSerialNumber", "StationName",
        "DetectorID", "StudyDescription", "SeriesDescription", "ProtocolName", "ImageComments",
        "PatientComments",
    ):  # fmt: skip
        setattr(ds, keyword, MARK)
    ds.PatientAge, ds.PatientWeight, ds.PatientBirthDate = "060Y", 70.5, "19310519"
    ds.AcquisitionDateTime, ds.SeriesDate = "20170823101112", "20170823"
    ds.file_meta.SourceApplicationEntityTitle = "ZZMARK"
    ds.BurnedInAnnotation, ds.IconImageSequence = "YES", [pydicom.Dataset()]
    ds.add_new(0x00090010, "LO", MARK)
    ds.preamble = MARK.encode().ljust(128, b"\0")
    return ds


def test_every_field_is_listed_by_name_and_kind(tmp_path: Path) -> None:
    sets = slices(PLACES["axial"], np.zeros((3, 4, 5), np.int16))
    marked(sets[1])  # of a folder every file is looked at
    told = identifying_fields(saved(sets, tmp_path / "scan"))
    for kind, names in EXPECTED.items():
        assert names <= set(told.fields[kind]), kind
    assert not {"SOPClassUID", "TransferSyntaxUID", "ImplementationClassUID", "Modality"} & {
        name for names in told.fields.values() for name in names
    }
    sentences = " ".join(finding.line for finding in told.findings)
    assert MARK not in sentences.lower()
    assert "1931" not in sentences
    assert "2017" not in sentences
    levels = {finding.code: finding.level for finding in told.findings}
    assert (levels["identifying_person"], levels["identifying_uids"]) == (Level.WARN, Level.NOTE)


def test_empty_fields_are_not_listed(tmp_path: Path) -> None:
    """A field that is there and empty (type 2 of PS3.5, 7.4) holds nothing."""
    ds = slices(PLACES["axial"], np.zeros((1, 4, 5), np.int16))[0]
    for keyword in ("PatientName", "PatientID", "PatientBirthDate", "AccessionNumber", "StudyDate"):
        setattr(ds, keyword, "")
    ds.BurnedInAnnotation = "NO"
    for implicit in (False, True):
        if implicit:
            ds.file_meta.TransferSyntaxUID = pydicom.uid.ImplicitVRLittleEndian
        pydicom.dcmwrite(tmp_path / "x", ds, enforce_file_format=True)
        told = identifying_fields(tmp_path / "x")
        assert told.fields["person"] == ("StudyID",)
        assert "StudyDate" not in told.fields["dates"]
        assert "pictures" not in told.fields
        assert "private" not in told.fields


def test_a_damaged_field_counts_as_held(tmp_path: Path) -> None:
    """Neither a type that does not exist nor an empty one of that type may hide a field, or stop the list."""
    ds = slices(PLACES["axial"], np.zeros((1, 4, 5), np.int16))[0]
    ds.PatientAddress, ds.OtherPatientNames = MARK, ""
    pydicom.dcmwrite(tmp_path / "x", ds, enforce_file_format=True)
    data = (tmp_path / "x").read_bytes()
    for tag in (b"\x10\x00\x40\x10LO", b"\x10\x00\x01\x10PN"):
        assert data.count(tag) == 1
        data = data.replace(tag, tag[:4] + b"S\x01")
    (tmp_path / "x").write_bytes(data)
    assert {"PatientAddress", "OtherPatientNames", "PatientName"} <= set(
        identifying_fields(tmp_path / "x").fields["person"]
    )


def test_pydicom_walks_to_the_same_fields() -> None:
    """A slow twin: pydicom's walk over decoded elements of its packaged CT, types of PS3.5 6.2 alone."""
    path = Path(str(get_testdata_file("CT_small.dcm", download=False)))
    seen: dict[str, set[str]] = {"PN": set(), "DA": set(), "TM": set(), "DT": set(), "UI": set()}

    def note(_: pydicom.Dataset, element: pydicom.DataElement) -> None:
        standard = element.VR == "UI" and str(element.value).startswith("1.2.840.10008.")
        if element.VR in seen and element.value and not element.tag.is_private and not standard:
            seen[element.VR].add(element.keyword)

    pydicom.dcmread(path).walk(note)
    fields = identifying_fields(path).fields
    assert seen["PN"] <= set(fields["person"])
    assert set(fields["dates"]) == (seen["DA"] | seen["TM"] | seen["DT"]) - {"PatientBirthDate"}
    assert set(fields["uids"]) - {"MediaStorageSOPInstanceUID"} == seen["UI"]


def test_the_table_names_fields_that_exist() -> None:
    """Every keyword is in pydicom's copy of PS3.6 (repeating groups 50xx and 60xx have none of one tag)."""
    repeating = {"OverlayData", "OverlayComments", "CurveData"}
    for kind in identifying_kinds().values():
        assert [f for f in kind.fields if f not in repeating and tag_for_keyword(f) is None] == []
    everywhere = [field for kind in identifying_kinds().values() for field in kind.fields]
    assert len(everywhere) == len(set(everywhere))
    assert dictionary_VR("PatientBirthDate") == "DA"  # a date that is told of a person


def box() -> LabelVolume:
    labels = np.zeros((12, 12, 12), np.uint16)
    labels[3:9, 3:9, 3:9] = 1
    return LabelVolume(Grid((12, 12, 12), np.diag([1.0, 1, 1, 1])), labels)


@pytest.mark.parametrize("kind", [nib.Nifti1Image, nib.Nifti2Image])
@pytest.mark.parametrize("packed", [True, False])
def test_texts_and_extensions_of_nifti(tmp_path: Path, kind: type, packed: bool) -> None:
    """Offsets of nifti1.h and nifti2.h as nibabel writes them; gzip's flags as Python's gzip does."""
    image = kind(np.zeros((4, 5, 6), np.uint8), np.eye(4))
    texts = {"descrip": b"a", "aux_file": b"b", "intent_name": b"d"}
    if kind is nib.Nifti1Image:
        texts |= {"db_name": b"c", "data_type": b"e"}
    for name, value in texts.items():
        image.header[name] = value
    image.header.extensions.append(nib.nifti1.Nifti1Extension("comment", MARK.encode()))
    image.header.extensions.append(nib.nifti1.Nifti1Extension(4, MARK.encode()))
    path, raw = tmp_path / "x.nii", image.to_bytes()
    if packed:
        path = tmp_path / "x.nii.gz"
        with path.open("wb") as file, gzip.GzipFile(f"{MARK}.nii", "wb", fileobj=file, mtime=7) as stream:
            stream.write(raw)
    else:
        path.write_bytes(raw)
    told = identifying_fields(path)
    words = set(texts) | ({"gzip's file name"} if packed else set())
    assert set(told.fields["words"]) == words
    assert told.fields["private"] == ("header extension of code 4", "header extension of code 6")
    assert ("dates" in told.fields) == packed
    assert MARK not in " ".join(f.line for f in told.findings)


def test_what_we_write_holds_none(tmp_path: Path) -> None:
    write_labels(tmp_path / "x.nii.gz", box())
    assert dict(identifying_fields(tmp_path / "x.nii.gz").fields) == {}


def test_keys_and_comments_of_nrrd(tmp_path: Path) -> None:
    header = {"space": "right-anterior-superior", "space directions": np.eye(3), "space origin": [0, 0, 0]}
    nrrd.write(str(tmp_path / "a.nrrd"), np.zeros((4, 5, 6), np.uint8), header)
    plain = set(identifying_fields(tmp_path / "a.nrrd").fields.get("private", ()))
    header |= {"patient": MARK, "content": MARK}
    nrrd.write(str(tmp_path / "b.nrrd"), np.zeros((4, 5, 6), np.uint8), header)
    told = identifying_fields(tmp_path / "b.nrrd")
    assert set(told.fields["private"]) - plain == {"key patient"}
    assert {"comment", "content"} <= set(told.fields["words"])  # pynrrd's own comment
    assert MARK not in " ".join(f.line for f in told.findings)


def scan(path: Path, **dates: str | None) -> Path:
    """A segmentation of a box whose file tells these dates; None leaves a field out."""
    labels = np.zeros((12, 12, 12), np.uint8)
    labels[3:9, 3:9, 3:9] = 1
    ds = segmentation(PLACES["axial"], labels, "BINARY", omit_empty_frames=False)
    for keyword, value in ({"AcquisitionDate": None, "StudyDate": None} | dates).items():
        if value is None:
            ds.pop(keyword, None)
        else:
            setattr(ds, keyword, value)
    ds.PatientName = MARK
    ds.save_as(path)
    return path


@pytest.mark.parametrize(
    ("first", "second", "days"),
    [
        ({"StudyDate": "20191231"}, {"StudyDate": "20200301"}, 61),  # 2020 is a leap year: 1 + 31 + 29
        ({"StudyDate": "20200301"}, {"StudyDate": "20191231"}, -61),
        ({"StudyDate": "20200101"}, {"StudyDate": "20200101"}, 0),
        (
            {"StudyDate": "20200101", "AcquisitionDate": "20200103"},
            {"StudyDate": "20200201", "AcquisitionDate": "20200204"},
            32,
        ),
        ({"StudyDate": "20200101", "AcquisitionDate": "20200103"}, {"StudyDate": "20200201"}, 31),
        ({"AcquisitionDate": "20200103"}, {"StudyDate": "20200201"}, None),
        ({"StudyDate": "20200101"}, {}, None),
        ({"AcquisitionDateTime": "20200103235959"}, {"AcquisitionDate": "20200104"}, 1),
    ],
)
def test_days_apart_by_the_calendar(tmp_path: Path, first: dict, second: dict, days: int | None) -> None:
    assert days_apart(scan(tmp_path / "a", **first), scan(tmp_path / "b", **second)) == days


def test_days_are_told_of_two_dicom_scans_only(tmp_path: Path) -> None:
    write_labels(tmp_path / "x.nii.gz", box())
    assert days_apart(scan(tmp_path / "a", StudyDate="20200101"), tmp_path / "x.nii.gz") is None


def test_screen_lists_fields_and_days_and_no_value(tmp_path: Path, capsys: pytest.CaptureFixture) -> None:
    a, b = (scan(tmp_path / n, StudyDate=d) for n, d in (("a.dcm", "20200101"), ("b.dcm", "20200311")))
    assert main(["screen", str(a), str(b), "--json"]) == 0
    said = capsys.readouterr()
    document = json.loads(said.out)
    assert "PatientName" in document["files"][0]["identifying_fields"]["person"]
    assert document["pair"]["days_apart"] == 70
    assert "days_apart" in {finding["code"] for finding in document["pair"]["findings"]}
    assert main(["screen", str(a), str(b)]) == 0
    plain = capsys.readouterr()
    assert "PatientName" in plain.out + plain.err
    assert "was made 70 days after the other scan" in plain.out + plain.err
    for text in (said.out, said.err, plain.out, plain.err):
        assert MARK not in text
        assert "2020" not in text
