"""Three hundred damaged inputs over all readers: exit 3, one sentence, 5 s, 1 GB, nothing written.

Truth: the damages themselves (`damages`), planted by the layouts of the formats.  The commands run as users
run them, in children with limited memory and time (`damage_runner`).
"""

import json
import subprocess
import sys
from collections import Counter
from pathlib import Path

import numpy as np
import pytest
from damages import HERE, all_cases

LEAST = 300


def laid_out(cases, root):
    """The files of all cases on disk, one folder a case, and what to run."""
    jobs = []
    for number, case in enumerate(cases):
        folder = root / f"{number:03d}"
        for place in (folder, *(folder / name for name in case.folders)):
            place.mkdir()
        for name, data in case.files.items():
            (folder / name).parent.mkdir(exist_ok=True)
            (folder / name).write_bytes(data)
        arguments = [argument.replace(HERE, str(folder)) for argument in case.arguments]
        jobs.append({"name": case.name, "arguments": arguments, "folder": str(folder)})
    return jobs


@pytest.fixture(scope="module")
def outcomes(tmp_path_factory, small_pair):
    root = tmp_path_factory.mktemp("damaged")
    places = {"source": small_pair.source, "target": small_pair.target, "through": small_pair.folder}
    cases = all_cases(root / "sound", **{name: str(place) for name, place in places.items()})
    jobs, done = root / "jobs.json", root / "done.json"
    jobs.write_text(json.dumps(laid_out(cases, root)))
    runner = Path(__file__).with_name("damage_runner.py")
    subprocess.run([sys.executable, str(runner), str(jobs), str(done)], check=True)
    return root, list(zip(cases, json.loads(done.read_text()), strict=True))


def wrong(case, result, root):
    """What is wrong with how a command ended, in words; empty when nothing is."""
    said, faults = result["said"], []
    if result["status"] not in case.statuses:
        faults.append(f"exit {result['status']}")
    lines = said.splitlines()
    if result["status"] and (len(lines) != 1 or not lines[0].startswith("volmap: ")):
        faults.append(f"{len(lines)} lines on stderr")
    if "Traceback" in said or str(root) in said:
        faults.append("a traceback or a path")
    if result["cpu_s"] > 5 or result["most_kb"] > 2**20:
        faults.append(f"{result['cpu_s']:.1f} s, {result['most_kb'] / 2**20:.2f} GB")
    if result["left"] and result["status"]:
        faults.append(f"left {result['left'][:3]}")
    return f"{case.name}: {'; '.join(faults)}: {said[-300:]}" if faults else ""


def test_every_damaged_input_ends_in_one_sentence(outcomes):
    root, pairs = outcomes
    faults = [fault for fault in (wrong(case, result, root) for case, result in pairs) if fault]
    assert not faults, "\n" + "\n".join(faults)


def test_three_hundred_of_them_over_all_readers_are_unreadable(outcomes):
    counted = Counter(case.name.split("/")[0] for case, result in outcomes[1] if result["status"] == 3)
    assert sum(counted.values()) >= LEAST
    readers = (
        "nifti1 nifti2 pair nrrd nhdr segmentation series vtu vtk stl ply off obj boundary landmarks guides "
        "names vtp lines measurements gates field vectors tensors"
    )
    readers = {*readers.split(), "nifti1 packed", "map folder", "vtk text", "vtp lines"}
    assert readers <= set(counted)


def test_the_sentences_differ(outcomes):
    # a reader that said the same of everything would say nothing
    said = [result["said"] for _, result in outcomes[1] if result["status"] == 3]
    told = {sentence.split(": ", 2)[-1].split(",")[0] for sentence in said}
    assert len(told) > 60


def test_the_files_are_sound_before_they_are_damaged(tmp_path):
    # without this a reader that refuses everything would pass
    import nibabel as nib
    import sound_files as sound

    from volmap.io.given_boundary import read_given_boundary
    from volmap.io.surfaces import read_closed_surface
    from volmap.io.volumes import read_image, read_labels

    header, voxels = sound.pair_bytes()
    one = sound.nifti_bytes(nib.Nifti1Image)
    made = {
        "one.nii": one,
        "packed.nii.gz": sound.pack(one),
        "two.nii": sound.nifti_bytes(nib.Nifti2Image),
        "pair.hdr": header,
        "pair.img": voxels,
        "x.nhdr": sound.nrrd_bytes(tmp_path, encoding="raw", detached=True),
        **{f"{e}.nrrd": sound.nrrd_bytes(tmp_path, encoding=e) for e in ("raw", "gzip", "ascii")},
        **{f"{kind}.dcm": sound.dicom_segmentation_bytes(tmp_path, kind) for kind in ("BINARY", "LABELMAP")},
        "x.vtu": sound.mesh_bytes(tmp_path, ".vtu", images=True),
    }
    for name, data in made.items():
        (tmp_path / name).write_bytes(data)
    for name in made:
        if not name.endswith((".vtu", ".dcm")):
            assert np.array_equal(read_labels(tmp_path / name).labels, sound.labels()), name
        elif name.endswith(".dcm"):
            assert read_labels(tmp_path / name).present == (1, 2)
    sound.dicom_series_bytes(tmp_path)
    assert read_image(tmp_path / "series").grid.shape == (9, 8, 5)
    for ending in (".stl", ".ply", ".off", ".obj", ".vtk"):
        sound.mesh_bytes(tmp_path, ending)
        assert len(read_closed_surface(tmp_path / f"x{ending}")[1]) == 12
    assert len(read_given_boundary(tmp_path / "x.vtu", tolerance_mm=1, reach_mm=1).triangles) == 12
