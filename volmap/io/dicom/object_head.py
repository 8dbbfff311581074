"""What every written object begins with: patient, study, series, equipment and common modules.

Nothing is taken from an input.  Patient name and ID are fixed words; attributes of Type 2 are empty; dates
and times that must be there (Type 1) are those of a stated day, so that the same content gives the same
bytes.  Section numbers are those of PS3.3.
"""

from __future__ import annotations

import hashlib
import json
import os
from importlib.metadata import version
from typing import TYPE_CHECKING

from volmap.io.atomic import whole_file
from volmap.io.dicom.own_labels import MAKER
from volmap.io.dicom.uids import ScanUids, new_uid
from volmap.io.opening import shown_name
from volmap.types.errors import InputError
from volmap.types.notice import caution, short_caution

if TYPE_CHECKING:
    from pydicom.dataelem import DataElement
    from pydicom.dataset import Dataset

PathLike = str | os.PathLike[str]
NO_PATIENT_NAME, NO_PATIENT_ID = "Not^Stated", "not stated"
NO_DATE, NO_TIME = "19000101", "000000"
_LONGEST = {"LO": 64, "ST": 1024}
_NO_SCHEME = "99NOTSTATED"  # 99: of no registered scheme (8.2)
_MODIFYING = ("109103", "DCM", "Modifying Equipment")  # CID 7005


def begun(scan: ScanUids, *, sop_class: str, modality: str, description: str, told: str) -> Dataset:
    """A data set with the modules that do not depend on what is inside.

    Parameters
    ----------
    scan : ScanUids
        The scan the object belongs to: its study, and its frame of reference.
    sop_class : str
    modality : str
        "REG" or "SEG".
    description : str
        Of series and content, at most 64 characters.
    told : str
        What a reader must know; the caution and the word on dates are added.
    """
    from pydicom.dataset import Dataset

    made = Dataset()
    made.SpecificCharacterSet = "ISO_IR 192"
    made.PatientName, made.PatientID = NO_PATIENT_NAME, NO_PATIENT_ID  # C.7.1.1
    made.PatientBirthDate = made.PatientSex = ""
    made.PatientIdentityRemoved = "YES"
    made.DeidentificationMethod = "written anew, no field of an input copied"
    made.StudyInstanceUID = scan.study  # C.7.2.1
    made.StudyDate = made.StudyTime = made.StudyID = made.AccessionNumber = made.ReferringPhysicianName = ""
    made.Modality, made.SeriesNumber = modality, 1  # C.7.3.1
    made.SeriesDescription = text(description, "LO")
    made.FrameOfReferenceUID, made.PositionReferenceIndicator = scan.frame, ""  # C.7.4.1
    made.Manufacturer = made.ManufacturerModelName = MAKER  # C.7.5.1, C.7.5.2
    made.DeviceSerialNumber, made.SoftwareVersions = "none", version("volmap")
    made.SOPClassUID, made.InstanceNumber = sop_class, 1  # C.12.1
    made.ContentQualification = "RESEARCH"
    made.ContributingEquipmentSequence = [_equipment(told)]
    made.ContentDate, made.ContentTime = NO_DATE, NO_TIME
    made.ContentDescription = text(short_caution(), "LO")
    return made


def _equipment(told: str) -> Dataset:
    """The one attribute of SOP Common with room for sentences."""
    from pydicom.dataset import Dataset

    made = Dataset()
    made.PurposeOfReferenceCodeSequence = [coded(*_MODIFYING)]
    made.Manufacturer = "volmap"
    dates = f"Dates are not stated: {NO_DATE} stands where one is required."
    made.ContributionDescription = text(f"{told} {dates} {caution()}", "ST")
    return made


def coded(value: str, scheme: str, meaning: str) -> Dataset:
    """One coded entry (8.8): by length and form in Code Value, Long Code Value or URN Code Value."""
    from pydicom.dataset import Dataset

    made = Dataset()
    if value.lower().startswith(("urn:", "http:", "https:")):
        made.URNCodeValue = value  # names its scheme itself
    elif len(value) <= 16:
        made.CodeValue = value
    else:
        made.LongCodeValue = value
    if scheme or "URNCodeValue" not in made:
        made.CodingSchemeDesignator = scheme[:16] or _NO_SCHEME
    made.CodeMeaning = text(meaning, "LO")
    return made


def text(words: str, kind: str) -> str:
    """Words as an attribute may hold them: no backslash, no control letter, cut to its length."""
    clean = "".join(" " if c in "\\\n\r\t\f\x1b" or ord(c) < 32 else c for c in words)
    return clean.strip()[: _LONGEST[kind]].strip()


def put(path: PathLike, made: Dataset, *, overwrite: bool) -> None:
    """Give the object identifiers made from its content, and write it whole (Explicit VR Little Endian).

    Raises
    ------
    InputError
        The place is taken or cannot be written, or the name does not end in .dcm.
    """
    from pydicom import dcmwrite
    from pydicom.dataset import FileMetaDataset
    from pydicom.uid import UID, ExplicitVRLittleEndian

    require_dcm(path)
    content = _digest(made)
    made.SeriesInstanceUID = new_uid("series", content)
    made.SOPInstanceUID = new_uid("instance", content)
    meta = FileMetaDataset()
    meta.TransferSyntaxUID = ExplicitVRLittleEndian
    meta.ImplementationClassUID = UID(new_uid("implementation"))
    meta.ImplementationVersionName = f"volmap {version('volmap')}"[:16]
    made.file_meta = meta
    with whole_file(path, overwrite=overwrite) as temporary:
        dcmwrite(temporary, made, enforce_file_format=True)


def require_dcm(path: PathLike) -> None:
    """Refuse a name that does not end in .dcm.

    Raises
    ------
    InputError
    """
    if not str(path).lower().endswith(".dcm"):
        raise InputError("is no name for a DICOM file", where=shown_name(path), expected=".dcm")


def _digest(made: Dataset) -> str:
    """SHA-256 of all that is in the object."""

    def bulk(element: DataElement) -> str:
        return hashlib.sha256(element.value).hexdigest()

    words = made.to_json_dict(bulk_data_threshold=64, bulk_data_element_handler=bulk)
    return hashlib.sha256(json.dumps(words, sort_keys=True).encode("utf-8")).hexdigest()
