"""A small study on local workers: bad scans stop nobody, nothing is done twice, a kill loses nothing."""

import os
import signal
import subprocess
import sys
import time

import numpy as np
import pandas
import pytest

from volmap.io.nifti import write_labels
from volmap.mapfolder import read_certificate
from volmap.study.ledger import State, driving, reading
from volmap.study.run import Crew, run_study
from volmap.study.study_file import read_study
from volmap.study.tables import write_tables
from volmap.types import Grid, LabelVolume

HEAD = """schema = "volmap-study/1"
name = "rigs"
names = "names.tsv"
[settings]
edge_mm = 5.0
one_order = true
"""


def _ball(axes_mm, core_mm, *, hole=False):
    """An ellipsoid (label 1) with a ball in it (label 2), 1.5 mm voxels."""
    affine = np.diag([1.5, 1.5, 1.5, 1.0])
    affine[:3, 3] = -18.0
    grid = Grid((25, 25, 25), affine)
    x = grid.to_world(np.argwhere(np.ones(grid.shape)).astype(float))
    labels = ((x / axes_mm) ** 2).sum(axis=1) <= 1
    labels = labels.astype(np.uint16) + (labels & ((x**2).sum(axis=1) <= core_mm**2))
    if hole:
        labels[np.hypot(x[:, 0], x[:, 1]) < 2.5] = 0
    return LabelVolume(grid, labels.reshape(grid.shape), {1: "shell", 2: "core"})


BODIES = {
    ("good", "v0"): _ball((12, 11, 13), 6),
    ("good", "v1"): _ball((13, 11, 13), 6.5),
    ("good", "v2"): _ball((13, 12, 13), 7),
    ("holed", "v0"): _ball((12, 11, 13), 6),
    ("holed", "v1"): _ball((12, 11, 13), 6, hole=True),
    ("torn", "v0"): _ball((12, 12, 12), 6),
    ("torn", "v1"): None,
}
COUNTS = {
    "scan": {State.DONE: 6, State.REFUSED: 1},
    "map": {State.BLOCKED: 1, State.DONE: 2, State.REFUSED: 1},
}
DRIVER = """
from pathlib import Path
from volmap.study.run import Crew, run_study
from volmap.study.study_file import read_study

if __name__ == "__main__":
    study = read_study(Path("study.toml"))
    run_study(study, Crew(1), told=lambda entry: print(entry.state, entry.job, flush=True))
"""


def _written(folder):
    text = HEAD
    for subject in ("good", "holed", "torn"):
        text += f'[[subject]]\nname = "{subject}"\n'
        for day, (_, visit) in enumerate(key for key in BODIES if key[0] == subject):
            file = f"{subject}_{visit}.nii.gz"
            text += f'[[subject.visit]]\nname = "{visit}"\nday = {day}\nlabels = "{file}"\n'
            body = BODIES[subject, visit]
            if body is None:
                (folder / file).write_bytes(b"\x1f\x8b torn")
            else:
                write_labels(folder / file, body)
    (folder / "study.toml").write_text(text)
    (folder / "names.tsv").write_text("index\tname\n1\tshell\n2\tcore\n")
    (folder / "driver.py").write_text(DRIVER)


def _run(folder, workers=1):
    seen = []
    counts = run_study(read_study(folder / "study.toml"), Crew(workers), told=seen.append)
    return counts, seen


def _killed_after_the_first_map(folder):
    """Driver and worker die at once; the name of the map that was finished before."""
    driver = subprocess.Popen(
        [sys.executable, "driver.py"], cwd=folder, stdout=subprocess.PIPE, text=True, start_new_session=True
    )
    finished = next(line for line in driver.stdout if line.startswith("done map"))
    time.sleep(0.3)
    os.killpg(driver.pid, signal.SIGKILL)
    driver.wait()
    driver.stdout.close()
    return finished.split(" ", 1)[1].strip()


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    """A study folder after a kill and a restart; stamps of the first map before and after the restart."""
    folder = tmp_path_factory.mktemp("study")
    _written(folder)
    finished = _killed_after_the_first_map(folder)
    with reading(folder) as ledger:
        before = {e.job: e for e in ledger.entries()}
    assert before[finished].state is State.DONE
    certificate = folder / before[finished].output / "certificate.json"
    stamp = certificate.stat().st_mtime_ns
    for path in (folder / "maps").rglob("certificate.json"):
        if not path.parent.name.startswith("."):
            read_certificate(path.parent)  # whole
    counts, _ = _run(folder, workers=2)
    assert counts == COUNTS
    return folder, stamp, certificate.stat().st_mtime_ns


def test_killed_in_the_middle_it_goes_on_where_it_was(study):
    _, before, after = study
    assert before == after


def test_bad_scans_stop_nobody_and_are_named(study):
    folder = study[0]
    with reading(folder) as ledger:
        rows = {e.job: e for e in ledger.entries()}
        trouble = {job: sentence for job, _, sentence in ledger.troubles()}
        told = {job: ledger.told(job) for job in rows}
    assert set(trouble) == {"scan torn v1", "map holed v0 v1"}
    assert "torn_v1.nii.gz" in trouble["scan torn v1"]
    assert "no map without tearing" in trouble["map holed v0 v1"]
    assert rows["map torn v0 v1"].sentence == "stands on scan torn v1, which is refused"
    for job in ("map good v0 v1", "map good v0 v2"):
        certificate = read_certificate(folder / rows[job].output)
        assert rows[job].verdict == certificate.verdict
        assert told[job]["source"] == certificate.source["sha256"]


def test_nothing_is_done_twice_and_a_changed_scan_redoes_what_stands_on_it(study):
    folder = study[0]
    counts, seen = _run(folder)
    assert (counts, [e.job for e in seen if e.state is State.DONE]) == (COUNTS, [])
    write_labels(folder / "good_v2.nii.gz", _ball((13, 12.5, 13), 7), overwrite=True)
    _, redone = _run(folder)
    assert {e.job for e in redone if e.state is State.DONE} == {"scan good v2", "map good v0 v2"}
    assert [e.state for e in redone if e.job == "map good v0 v2"] == [State.RUNNING, State.DONE]


def test_tables_hold_every_map_and_say_which_may_be_used(study):
    """pandas reads what a statistics package would; volumes are those of the voxels themselves."""
    folder = study[0]
    maps = pandas.read_csv(folder / "tables" / "maps.csv", keep_default_na=False)
    assert maps["state"].tolist() == ["done", "done", "refused", "blocked"]
    assert maps["used"].tolist() == [True, True, False, False]
    assert "no map without tearing" in maps["reason"][2]
    regions = pandas.read_parquet(folder / "tables" / "regions.parquet")
    assert regions["target_visit"].tolist() == ["v1", "v1", "v2", "v2"]
    assert regions["target_day_days"].tolist() == [1, 1, 2, 2]
    inside = BODIES["good", "v1"]
    for region, label in zip(regions["name"][:2], (1, 2), strict=True):
        assert region == inside.names[label]
        voxels = (inside.labels == label).sum() * 1.5**3
        assert regions["volume_target_voxels_mm3"][label - 1] == pytest.approx(voxels)


def test_an_exclusion_is_in_the_tables(study):
    folder = study[0]
    with driving(folder) as ledger:
        ledger.exclude("map good v0 v1", "wrong visit")
        write_tables(read_study(folder / "study.toml"), ledger)
        maps = pandas.read_csv(folder / "tables" / "maps.csv", keep_default_na=False)
        ledger.exclude("map good v0 v1", "")
    assert (maps["used"][0], maps["reason"][0]) == (False, "wrong visit")
    regions = pandas.read_parquet(folder / "tables" / "regions.parquet")
    assert regions["used"].tolist() == [False, False, True, True]
