"""GIFTI files, read again by an XML parser, base64 and zlib alone (GIFTI 1.0, sections 2 to 4).

Truth: what was written, by the format's own text and by nibabel as a second reader.
"""

import base64
import zlib
from xml.etree import ElementTree

import nibabel as nib
import numpy as np
import pytest

from volmap.io.gifti import write_gifti_surface, write_gifti_values
from volmap.types import InputError

POINTS = np.array([[-5.0, 3, 100.25], [5, 3, 100.25], [-5, 23, 100.25], [-5, 3, 130.75]])
TRIANGLES = np.array([[0, 2, 1], [0, 1, 3], [0, 3, 2], [1, 2, 3]])


def by_hand(path):
    """(intent, name, array) of each data array, and the file's own metadata."""
    root = ElementTree.parse(path).getroot()
    arrays = []
    for part in root.iter("DataArray"):
        kind = {"NIFTI_TYPE_FLOAT32": "<f4", "NIFTI_TYPE_INT32": "<i4"}[part.get("DataType")]
        assert (part.get("Encoding"), part.get("Endian")) == ("GZipBase64Binary", "LittleEndian")
        assert part.get("ArrayIndexingOrder") == "RowMajorOrder"
        shape = [int(part.get(f"Dim{d}")) for d in range(int(part.get("Dimensionality")))]
        values = np.frombuffer(zlib.decompress(base64.b64decode(part.find("Data").text)), kind)
        arrays.append((part.get("Intent"), meta(part)["Name"], values.reshape(shape), part))
    return arrays, meta(root)


def meta(part):
    return {md.find("Name").text: md.find("Value").text for md in part.find("MetaData")}


def test_a_surface_is_where_it_was_and_says_which_world(tmp_path):
    path = tmp_path / "a.surf.gii"
    write_gifti_surface(path, POINTS, TRIANGLES, name="liver", description="Liver & co. in SOURCE.")
    (points, triangles), told = by_hand(path)
    assert points[:2] == ("NIFTI_INTENT_POINTSET", "liver")
    assert triangles[:2] == ("NIFTI_INTENT_TRIANGLE", "liver")
    assert np.abs(points[2] - POINTS).max() < 1e-5
    assert np.array_equal(triangles[2], TRIANGLES)
    space = points[3].find("CoordinateSystemTransformMatrix")
    assert space.find("DataSpace").text == space.find("TransformedSpace").text == "NIFTI_XFORM_SCANNER_ANAT"
    assert np.array_equal(np.array(space.find("MatrixData").text.split(), float).reshape(4, 4), np.eye(4))
    assert told["Description"].startswith("Liver & co. in SOURCE. World coordinates, RAS+, mm. For research")
    assert set(told) == {"Name", "Description"}  # no Date, UserName, SubjectID
    again = nib.load(path)
    assert np.array_equal(again.agg_data("pointset"), points[2])
    assert np.array_equal(again.agg_data("triangle"), triangles[2])


def test_values_keep_their_names_and_their_holes(tmp_path):
    path = tmp_path / "a.shape.gii"
    values = {"volume_ratio": np.array([1.0, 0.5, 2.0, np.nan]), "moved_mm": np.arange(4.0)}
    write_gifti_values(path, values, name="liver", description="On liver.")
    arrays, _ = by_hand(path)
    assert [(intent, name) for intent, name, *_ in arrays] == [
        ("NIFTI_INTENT_SHAPE", "volume_ratio"),
        ("NIFTI_INTENT_SHAPE", "moved_mm"),
    ]
    for _, name, found, _ in arrays:
        assert np.array_equal(found, values[name].astype(np.float32), equal_nan=True)


def test_the_same_surface_has_the_same_bytes(tmp_path):
    for name in "ab":
        write_gifti_surface(tmp_path / f"{name}.surf.gii", POINTS, TRIANGLES, name="x", description="y")
    assert (tmp_path / "a.surf.gii").read_bytes() == (tmp_path / "b.surf.gii").read_bytes()


@pytest.mark.parametrize("name", ["a.gii", "a.shape.gii", "a.vtp"])
def test_another_ending_is_refused_and_nothing_is_left(tmp_path, name):
    with pytest.raises(InputError, match="no name for this kind"):
        write_gifti_surface(tmp_path / name, POINTS, TRIANGLES, name="x", description="y")
    assert not list(tmp_path.iterdir())
