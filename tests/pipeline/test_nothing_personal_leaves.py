"""What identifies a person, a place or a machine stays where it was: every byte of every output is searched.

Marked words are planted in every field of every kind of input that can hold any, in the names of its folders
and in the environment; then all verbs that write are run.  Law: no output holds a mark, nor the date of the
day, nor an identifier of an input.  gzip, zlib and base64 are undone before the search.
"""

from __future__ import annotations

import base64
import getpass
import gzip
import io
import platform
import re
import socket
import time
import zlib

import nibabel as nib
import nrrd
import numpy as np
import pyarrow.parquet
import pydicom
import pytest
import pyvista
from pydicom.dataelem import DataElement
from pydicom.sequence import Sequence
from volmap_cli.main import main
from volmap_phantoms.broken import body
from volmap_phantoms.writer import save_labels

from volmap.io.dicom.segmentation_writing import write_segmentation
from volmap.io.dicom.uids import uids_of_scan
from volmap.io.nifti import read_labels
from volmap.io.vtk_xml import read_mesh, write_mesh, write_surface
from volmap.pipeline.personal_columns import without_personal
from volmap.types import ImageVolume, Measurements, TetMesh

MARK = "zzmark"  # in every planted word
SERIES = "zzperson_in_a_name_of_a_folder"  # the user types it, so it may be on the terminal, and nowhere else
UID = "1.2.840.777777.5"  # the root of every identifier of an input
BIRTH, SCANNED = "19310519", "20170823"
PLANTED = (MARK, UID, BIRTH, SCANNED, "1931-05-19", "2017-08-23")


def planted_dicom(ds):
    """Marks in all that PS3.15, table E.1-1, would have removed, as far as the object can hold it."""
    words = {
        "PatientName": f"{MARK}^Name", "PatientID": f"{MARK}-id", "OtherPatientNames": f"{MARK}^Other",
        "PatientAddress": f"{MARK} street", "PatientComments": f"{MARK} comment", "IssuerOfPatientID": MARK,
        "InstitutionName": f"{MARK} clinic", "InstitutionAddress": MARK, "InstitutionalDepartmentName": MARK,
        "ReferringPhysicianName": f"{MARK}^Doc", "OperatorsName": MARK, "StationName": MARK, "StudyID": MARK,
        "AccessionNumber": MARK, "StudyDescription": MARK, "SeriesDescription": MARK, "ProtocolName": MARK,
        "Manufacturer": f"{MARK} works", "ManufacturerModelName": MARK, "DeviceSerialNumber": MARK,
        "SoftwareVersions": MARK,
        "ContentDescription": MARK, "ContentCreatorName": MARK, "ContentLabel": "ZZMARK",
        "PatientBirthDate": BIRTH, "StudyDate": SCANNED, "SeriesDate": SCANNED, "ContentDate": SCANNED,
        "AcquisitionDate": SCANNED, "AcquisitionDateTime": f"{SCANNED}101112", "ImageComments": MARK,
        "StudyInstanceUID": f"{UID}.1", "SeriesInstanceUID": f"{UID}.2", "FrameOfReferenceUID": f"{UID}.3",
        "PositionReferenceIndicator": MARK, "RequestingPhysician": MARK, "DeidentificationMethod": MARK,
    }  # fmt: skip
    for keyword, value in words.items():
        setattr(ds, keyword, value)
    ds.SOPInstanceUID = f"{UID}.4.{ds.get('InstanceNumber', 1)}"
    ds.file_meta.MediaStorageSOPInstanceUID = ds.SOPInstanceUID
    ds.file_meta.SourceApplicationEntityTitle = "ZZMARK"
    ds.preamble = f"{MARK} preamble".encode().ljust(128, b"\0")
    ds.add(DataElement(0x00090010, "LO", f"{MARK} private"))
    ds.add(DataElement(0x00091001, "LO", f"{MARK} private value"))
    request = pydicom.Dataset()
    request.RequestedProcedureDescription, request.ReferencedSOPInstanceUID = MARK, f"{UID}.6"
    ds.RequestAttributesSequence = Sequence([request])
    ds.pop("ContributingEquipmentSequence", None)
    return ds


def planted_nifti(path):
    """The same file with marks in all that a NIfTI-1 header and its extensions can say."""
    image = nib.load(path)
    header = image.header
    header["descrip"], header["aux_file"] = f"{MARK} descrip".encode(), f"{MARK} aux".encode()
    header["db_name"], header["data_type"] = f"{MARK} db".encode(), f"{MARK}dt".encode()
    header["intent_name"] = f"{MARK} intent".encode()
    header.extensions.append(nib.nifti1.Nifti1Extension("comment", f"{MARK} extension {BIRTH}".encode()))
    header.extensions.append(nib.nifti1.Nifti1Extension("afni", f"<AFNI {MARK}/>".encode()))
    data = np.asarray(image.dataobj)
    raw = nib.Nifti1Image(data, image.affine, header).to_bytes()
    with path.open("wb") as file, gzip.GzipFile(f"{MARK}_original.nii", "wb", fileobj=file) as packed:
        packed.write(raw)


def planted_header(path):
    """The same in a header of its own (nifti1.h: data_type, db_name, descrip, aux_file, intent_name)."""
    raw = bytearray(path.read_bytes())
    for at, room in ((4, 10), (14, 18), (148, 80), (228, 24), (328, 16)):
        raw[at : at + room] = MARK.encode().ljust(room, b"\0")
    path.write_bytes(bytes(raw))


def slices_of(volume: ImageVolume, folder):
    """A folder of CT slices of a volume on an axial grid, each with marks."""
    folder.mkdir()
    lps = np.diag([-1.0, -1, 1])
    for k in range(volume.grid.shape[2]):
        ds = pydicom.Dataset()
        ds.file_meta = pydicom.dataset.FileMetaDataset()
        ds.file_meta.TransferSyntaxUID = pydicom.uid.ExplicitVRLittleEndian
        ds.file_meta.MediaStorageSOPClassUID = ds.SOPClassUID = pydicom.uid.CTImageStorage
        ds.Modality, ds.InstanceNumber, ds.SeriesNumber = "CT", k + 1, 1
        axes = lps @ volume.grid.affine[:3, :3] / volume.grid.spacing
        ds.ImageOrientationPatient = [*axes[:, 0], *axes[:, 1]]
        ds.ImagePositionPatient = list(lps @ volume.grid.to_world(np.array([[0, 0, float(k)]]))[0])
        ds.PixelSpacing, ds.SliceThickness = [*volume.grid.spacing[[1, 0]]], volume.grid.spacing[2]
        ds.Rows, ds.Columns, ds.SamplesPerPixel = volume.grid.shape[1], volume.grid.shape[0], 1
        ds.PhotometricInterpretation, ds.PixelRepresentation = "MONOCHROME2", 1
        ds.BitsAllocated, ds.BitsStored, ds.HighBit = 16, 16, 15
        ds.RescaleSlope, ds.RescaleIntercept = 1, 0
        ds.PixelData = volume.values[:, :, k].T.astype("<i2").tobytes()
        pydicom.dcmwrite(folder / f"{k:03d}.dcm", planted_dicom(ds), enforce_file_format=True)


@pytest.fixture(scope="module")
def outputs(tmp_path_factory):
    """A folder of all that was written, and all that was said, from inputs full of marks."""
    root = tmp_path_factory.mktemp("work")
    inputs, out = root / f"{MARK}_Jane_{BIRTH}", root / "out"
    inputs.mkdir()
    out.mkdir()
    with pytest.MonkeyPatch.context() as patch:
        for name in ("USER", "LOGNAME", "USERNAME", "HOSTNAME", "HOST", "HOME", "EMAIL", "REALNAME"):
            patch.setenv(name, f"{MARK}{name.lower()}")
        patch.setattr(socket, "gethostname", lambda: f"{MARK}-host")
        patch.setattr(platform, "node", lambda: f"{MARK}-node")
        patch.setattr(getpass, "getuser", lambda: f"{MARK}-user")
        patch.chdir(inputs)
        said = _run_everything(inputs, out)
    (out / "said.txt").write_text(said, encoding="utf-8")
    return out


def _run_everything(inputs, out):
    """Plant, run every verb that writes or speaks, and return what was said."""
    _plant(inputs)
    said = [_said(call) for call in _looks(out)]
    _write_boundary(inputs / "boundary.vtp", out / "mesh.vtu")
    given = ["--guides", "guides.csv", "--boundary", "boundary.vtp", "--boundary-tolerance", "1.5"]
    edge = ["--edge", "6"]
    maps = [
        ["map", "before.nii.gz", "after.dcm", "--out", str(out / "map"), *edge, "--target-image", SERIES],
        ["map", "before.nii.gz", "after.hdr", "--out", str(out / "given"), *edge, *given],
    ]
    return "\n".join(said + [_said(call) for call in (*maps, *_uses(out))])


def _plant(inputs):
    """Inputs of every kind, each with marks wherever its format has room for words."""
    save_labels(body(0), inputs / "before.nii.gz")
    save_labels(body(1), inputs / "after.nii.gz")
    source, target = (read_labels(inputs / name) for name in ("before.nii.gz", "after.nii.gz"))
    nib.save(nib.Nifti1Pair(target.labels, target.grid.affine), inputs / "after.hdr")
    planted_nifti(inputs / "before.nii.gz")
    planted_header(inputs / "after.hdr")
    write_segmentation(inputs / "after.dcm", target, scan=uids_of_scan("e" * 64))
    pydicom.dcmwrite(inputs / "after.dcm", planted_dicom(pydicom.dcmread(inputs / "after.dcm")))
    image = ImageVolume(target.grid, (100 * target.labels).astype(np.float32))
    slices_of(image, inputs / SERIES)
    _write_nrrd(inputs / "before.nrrd", source)
    _write_mesh(inputs / "mesh.vtu")
    _write_closed_surfaces(inputs)
    tables = {
        "points.csv": "name,x_mm,y_mm,z_mm\none,0,-6,-8\ntwo,2,8,6\n",
        "guides.csv": "name,x_mm,y_mm,z_mm,to_x_mm,to_y_mm,to_z_mm\none,0,-6,-8,1.5,-6.36,-9.48\n",
        "measured.csv": "name,x_mm,y_mm,z_mm,t1_ms,Patient name,birthdate,Date,site\n"
        f"one,0,-6,-8,900,{MARK},{BIRTH},{SCANNED},shell\n",
        "lines.csv": "line,x_mm,y_mm,z_mm\none,0,-6,-8\none,2,8,6\n",
        "measured.csv.json": f'{{"patient": "{MARK}"}}',
        "labels.tsv": f"index\tname\tpatient\n1\tshell\t{MARK}\n2\tcore\t{BIRTH}\n",
    }
    for name, text in tables.items():
        (inputs / name).write_text(text, encoding="utf-8")


def _looks(out):
    """Calls that need no map."""
    return [
        ["screen", "before.nii.gz", "after.dcm"],
        ["screen", "before.nrrd"],
        ["screen", "before.nii.gz", "--mend", str(out / "mended.nii.gz")],
        ["mesh", "before.nii.gz", "--out", str(out / "mesh.vtu"), "--edge", "6"],
        ["mesh", "closed.stl", "--out", str(out / "from_stl.vtu"), "--edge", "6"],
        ["mesh", "closed.ply", "--out", str(out / "from_ply.vtu"), "--edge", "6"],
    ]


def _uses(out):
    """Calls that take the map."""
    calls = [["certify", str(out / "map")], ["report", str(out / "map"), "--target-image", SERIES]]
    for name in ("measures.csv", "measures.parquet"):
        regions = ["--regions", "after.dcm", "--belongs-to", "target"]
        calls.append(["measure", str(out / "map"), "--out", str(out / name), *regions])
    things = {
        "points.csv": ("points.csv", []),
        "measured.csv": ("measured.csv", ["--rule", "value"]),
        "measured.csv ": ("measured.parquet", ["--rule", "value"]),
        "mesh.vtu": ("carried.vtu", []),
        "lines.csv": ("lines.csv", []),
        "lines.csv ": ("lines.vtp", []),
        "closed.ply": ("closed.vtp", []),
        "closed.stl": ("closed.ply", []),
        "closed.stl ": ("closed.stl", []),
        "before.nii.gz": ("carried.nii.gz", ["--as", "labels"]),
        "before.nii.gz ": ("parts.dcm", ["--as", "labels", "--labels", "shares"]),
        "before.nrrd": ("carried_from_nrrd.dcm", ["--as", "labels"]),
        "after.dcm": ("carried_back.nii.gz", ["--reverse"]),
        "after.hdr": ("carried_back_from_pair.nii", ["--reverse", "--as", "labels"]),
        SERIES: ("image_back.nii.gz", ["--reverse", "--belongs-to", "target"]),
    }
    for thing, (name, options) in things.items():
        through = ["--through", str(out / "map"), "--out", str(out / name)]
        calls.append(["carry", thing.strip(), *through, *options])
    for kind, name in {"registration": "field.dcm", "segmentation": "labels.dcm"}.items():
        calls.append(["export", str(out / "map"), "--as", kind, "--out", str(out / name)])
    for kind in ("surfaces", "solid"):
        calls.append(["export", str(out / "map"), "--as", kind, "--out", str(out / kind)])
    return calls


def _said(call):
    """What one call says, with and without --json; it must work."""
    from contextlib import redirect_stderr, redirect_stdout

    words = io.StringIO()
    with redirect_stdout(words), redirect_stderr(words):
        status = main([*call, "--json"])
    assert status in ((0, 1) if call[0] in ("map", "certify", "screen") else (0,)), (call, words.getvalue())
    return words.getvalue()


def _write_nrrd(path, volume):
    directions = volume.grid.affine[:3, :3].T
    header = {
        "space": "right-anterior-superior", "space directions": directions,
        "space origin": volume.grid.affine[:3, 3], "content": f"{MARK} content", "patient": f"{MARK}^Name",
        "date": SCANNED, "kinds": ["domain"] * 3, "encoding": "gzip",
    }  # fmt: skip
    nrrd.write(str(path), volume.labels.astype(np.uint8), header)
    raw = path.read_bytes()
    path.write_bytes(raw.replace(b"\n", f"\n# {MARK} comment\n".encode(), 1))


def _write_mesh(path):
    points = np.array([[0.0, 0, 0], [4, 0, 0], [0, 4, 0], [0, 0, 4]])
    mesh = TetMesh(points, np.array([[0, 1, 2, 3]]), np.array([1]))
    write_mesh(path, mesh, field_data={"patient": f"{MARK}^Name", "scanned": SCANNED})


def _write_closed_surfaces(folder):
    """A ball as binary STL, whose header has 80 letters, and as PLY with comments."""
    ball = pyvista.Icosphere(radius=12.0, nsub=3)
    ball.save(folder / "closed.stl", binary=True)
    raw = (folder / "closed.stl").read_bytes()
    (folder / "closed.stl").write_bytes(f"{MARK} {BIRTH}".encode().ljust(80) + raw[80:])
    ball.save(folder / "closed.ply", binary=False)
    text = (folder / "closed.ply").read_bytes()
    (folder / "closed.ply").write_bytes(text.replace(b"\nformat", f"\ncomment {MARK}\nformat".encode(), 1))
    assert f"comment {MARK}".encode() not in text


def _write_boundary(path, mesh_file):
    """SOURCE's boundary with where it goes, and words beside it."""
    surface = read_mesh(mesh_file)[0].interfaces
    images = 1.06 * surface.points + [1.5, 0.0, -1.0]
    told = {"name": MARK, "patient": f"{MARK}^Name", "scanned": SCANNED}
    write_surface(path, surface, point_data={"image_mm": images}, field_data=told)


def unpacked(path):
    """The bytes of a file, and of all that is packed in it."""
    raw = path.read_bytes()
    yield raw
    if path.name.endswith(".gz"):
        assert raw[4:8] == b"\0\0\0\0"  # no time in the gzip header
        yield gzip.decompress(raw)
    if path.suffix in (".vtu", ".vtp"):
        mesh = pyvista.read(path)
        for name in mesh.field_data:
            yield name.encode() + " ".join(map(str, np.ravel(mesh.field_data[name]))).encode()
        yield " ".join([*mesh.point_data, *mesh.cell_data]).encode()
    if path.suffix == ".parquet":
        table = pyarrow.parquet.read_table(path)
        yield f"{table.schema.to_string(show_field_metadata=True)} {table.to_pydict()}".encode()
    for text in re.findall(rb"[A-Za-z0-9+/]{40,}={0,2}", raw):
        plain = base64.b64decode(text + b"=" * (-len(text) % 4))
        yield plain
        for begin in (0, 8):
            try:
                yield zlib.decompress(plain[begin:])
            except zlib.error:
                continue


def test_no_output_holds_a_mark(outputs):
    files = sorted(p for p in outputs.rglob("*") if p.is_file())
    assert len(files) > 30
    words = [w.lower().encode() for w in (*PLANTED, MARK.encode("utf-16-le").decode("latin-1"))]
    found = [
        (path.relative_to(outputs).as_posix(), word)
        for path in files
        for part in unpacked(path)
        for word in words
        if word in part.lower()
    ]
    assert found == []


def test_no_file_holds_the_name_of_a_folder_of_images(outputs):
    for path in (p for p in outputs.rglob("*") if p.is_file() and p.name != "said.txt"):
        assert not [part for part in unpacked(path) if SERIES[:8].encode() in part], path.name


def test_no_output_holds_the_day_or_the_machine(outputs):
    words = [time.strftime(form).encode() for form in ("%Y-%m-%d", "%Y%m%d", "%d.%m.%Y", "%d %b %Y", "%b %d")]
    words += [w.encode() for w in (str(outputs.parent), socket.gethostname()) if len(w) > 3]
    for path in (p for p in outputs.rglob("*") if p.is_file() and p.name != "said.txt"):
        for part in unpacked(path):
            assert not [w for w in words if w in part], path.name


def test_the_search_finds_what_is_there(tmp_path):
    # The test above can fail: each way of packing is undone.
    from volmap.io.gifti import write_gifti_surface

    points = np.eye(3)
    write_gifti_surface(tmp_path / "a.surf.gii", points, np.array([[0, 1, 2]]), name=MARK, description="x")
    _write_mesh(tmp_path / "b.vtu")
    pyarrow.parquet.write_table(pyarrow.table({"a": [MARK] * 99}), tmp_path / "f.parquet", compression="zstd")
    (tmp_path / "c.gz").write_bytes(gzip.compress(MARK.encode(), mtime=0))
    (tmp_path / "d.html").write_bytes(
        base64.b64encode(f"{MARK} and more than forty letters in base64".encode())
    )
    (tmp_path / "e.xml").write_bytes(
        base64.b64encode(zlib.compress((MARK + "x" * 9 + "abcdefghijklmnopqrstuvwxyz").encode()))
    )
    for path in tmp_path.iterdir():
        assert any(MARK.encode() in part for part in unpacked(path)), path.name


@pytest.mark.parametrize("heading", ["Patient", "patient name", "MRN", "Date of birth", "birthdate", "Uid"])
def test_columns_that_name_someone_are_left_out_and_named(heading):
    table = Measurements(("a",), np.zeros((1, 3)), (), {heading: ("x",), "pathology": ("y",), "site": ("z",)})
    kept, (finding,) = without_personal(table, "table.csv")
    assert dict(kept.texts) == {"pathology": ("y",), "site": ("z",)}
    assert heading in finding.sentence
    assert without_personal(kept, "table.csv") == (kept, ())
