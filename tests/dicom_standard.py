"""PS3.3 against a written object: which attributes must be there, and which may.

Two sources.  The module tables that come with highdicom (made by its authors from the DocBook edition of
PS3.3, `highdicom/_standard/*.json`), read here with `json` alone; and a table typed in by hand, with section
numbers, from memory of the same standard, so that a slip in one is met by the other.
"""

import json
from functools import cache
from importlib.resources import files

from pydicom.datadict import keyword_for_tag

# section, attribute, type; one line a module
BY_HAND = {
    "C.7.1.1 Patient": "PatientName 2, PatientID 2, PatientBirthDate 2, PatientSex 2",
    "C.7.2.1 General Study": "StudyInstanceUID 1, StudyDate 2, StudyTime 2, ReferringPhysicianName 2, "
    "StudyID 2, AccessionNumber 2",
    "C.7.3.1 General Series": "Modality 1, SeriesInstanceUID 1, SeriesNumber 2",
    "C.7.4.1 Frame of Reference": "FrameOfReferenceUID 1, PositionReferenceIndicator 2",
    "C.7.5.1 General Equipment": "Manufacturer 2",
    "C.7.5.2 Enhanced General Equipment": "Manufacturer 1, ManufacturerModelName 1, DeviceSerialNumber 1, "
    "SoftwareVersions 1",
    "C.12.1 SOP Common": "SOPClassUID 1, SOPInstanceUID 1, SpecificCharacterSet 1",
}
REGISTRATION = BY_HAND | {
    "C.20.3 Deformable Spatial Registration": "ContentDate 1, ContentTime 1, InstanceNumber 1, "
    "ContentLabel 1, ContentDescription 2, DeformableRegistrationSequence 1",
    "C.20.3 an item": "DeformableRegistrationSequence/SourceFrameOfReferenceUID 1, "
    "DeformableRegistrationSequence/RegistrationTypeCodeSequence 2, "
    "DeformableRegistrationSequence/DeformableRegistrationGridSequence 1",
    "C.20.3 its grid": "DeformableRegistrationSequence/DeformableRegistrationGridSequence/"
    + ", DeformableRegistrationSequence/DeformableRegistrationGridSequence/".join(
        f"{name} 1"
        for name in (
            "ImageOrientationPatient",
            "ImagePositionPatient",
            "GridDimensions",
            "GridResolution",
            "VectorGridData",
        )
    ),
}

# A functional group is in one of these or in the other, or not there at all: the packaged tables do not say
# which, so the table typed in by hand judges that.
_GROUPS = [["SharedFunctionalGroupsSequence"], ["PerFrameFunctionalGroupsSequence"]]


@cache
def modules_of(sop_class):
    """Usage and attributes of each module of a SOP class, by the packaged tables."""
    place = files("highdicom") / "_standard"
    iods, modules, attributes = (
        json.loads((place / name).read_text())
        for name in ("sop_class_iod_map.json", "iod_module_map.json", "module_attribute_map.json")
    )
    return {row["key"]: (row["usage"], attributes[row["key"]]) for row in modules[iods[sop_class]]}


def faults(made, *, conditional=()):
    """What an object lacks or has too much, by the packaged tables; `conditional` modules count too."""
    modules = modules_of(str(made.SOPClassUID))
    found, allowed = [], set()
    for module, (usage, rows) in modules.items():
        for row in rows:
            allowed.add((*row["path"], row["keyword"]))
            judged = (usage == "M" or module in conditional) and row["path"] not in _GROUPS
            if judged and row["type"] in ("1", "2"):
                found += missing(made, row["path"], row["keyword"], row["type"], module)
    return found + [f"not in the IOD: {'/'.join(path)}" for path in paths(made) if path not in allowed]


def faults_by_hand(made, table):
    found = []
    for section, line in table.items():
        for entry in line.split(", "):
            path, kind = entry.split(" ")
            *above, keyword = path.split("/")
            found += missing(made, above, keyword, kind, section)
    return found


def missing(made, path, keyword, kind, module):
    """Where a Type 1 or 2 attribute is lacking; its parents, when they are there, count item by item."""
    if path:
        items = made.get(path[0]) or []
        return [line for item in items for line in missing(item, path[1:], keyword, kind, module)]
    if keyword not in made:
        return [f"{module}: {keyword} is missing"]
    value = made[keyword].value
    empty = value is None or (hasattr(value, "__len__") and len(value) == 0)
    return [f"{module}: {keyword} is empty"] if kind == "1" and empty else []


def paths(made, above=()):
    """Every attribute of the object with the sequences above it, each once."""
    seen = set()
    for element in made:
        here = (*above, keyword_for_tag(element.tag))
        seen.add(here)
        if element.VR == "SQ":
            for item in element.value:
                seen |= paths(item, here)
    return seen
