"""Days between two DICOM scans stand in the map's settings, and their dates nowhere."""

import pydicom
import pytest

from volmap.io.dicom.segmentation_writing import write_segmentation
from volmap.io.dicom.uids import uids_of_scan
from volmap.io.nifti import read_labels
from volmap.mapfolder import read_map_folder
from volmap.pipeline import files


def dated(nifti, path, date):
    write_segmentation(path, read_labels(nifti), scan=uids_of_scan("a" * 64))
    ds = pydicom.dcmread(path)
    ds.StudyDate = date
    ds.save_as(path)
    return path


@pytest.mark.parametrize(("dates", "days"), [(("20191231", "20200301"), 61), (("20200301", "20191231"), -61)])
def test_settings_hold_the_days_and_no_date(small_pair, small_job, tmp_path, without_report, dates, days):
    """61 = 1 + 31 + 29 by the calendar of the leap year 2020. The map itself is one that stands already."""
    scans = [
        dated(nifti, tmp_path / name, date)
        for nifti, name, date in zip(
            (small_pair.source, small_pair.target), ("a.dcm", "b.dcm"), dates, strict=True
        )
    ]
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(files, "map_pair", lambda *_, **__: read_map_folder(small_pair.folder))
        made = without_report(files.map_files, *scans, tmp_path / "map", small_job)
    assert made.certificate.settings["days_apart"] == days
    written = read_map_folder(tmp_path / "map")
    assert written.certificate.settings["days_apart"] == days
    text = (tmp_path / "map" / "certificate.json").read_text(encoding="utf-8")
    assert not any(date in text or f"{date[:4]}-{date[4:6]}-{date[6:]}" in text for date in dates)
