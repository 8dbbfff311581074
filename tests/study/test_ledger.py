"""The ledger: what is unchanged stays done, one driver writes, and a kill at any moment loses nothing."""

import os
import random
import signal
import sqlite3
import time

import pytest

from volmap.study.ledger import LEDGER, Entry, State, driving, reading
from volmap.types import InputError


def _entries(n, key="k"):
    return [
        Entry(f"map s v{i}", "map", "s", f"{key}{i}", State.WAITING, output=f"maps/{i}") for i in range(n)
    ]


def test_what_is_done_and_unchanged_stays_done(tmp_path):
    with driving(tmp_path) as ledger:
        ledger.plan(_entries(3))
        for i, state in enumerate((State.DONE, State.REFUSED, State.RUNNING)):
            ledger.begin(f"map s v{i}")
            if state is not State.RUNNING:
                ledger.settle(f"map s v{i}", state, sentence="why", verdict="pass", seconds=2.5)
    with driving(tmp_path) as ledger:  # as after a restart
        ledger.plan(_entries(3))
        done, refused, running = ledger.entries()
        assert (done.state, done.verdict, done.seconds, done.attempts) == (
            State.DONE,
            "pass",
            2.5,
            1,
        )
        assert (refused.state, refused.sentence) == (State.REFUSED, "why")
        assert running.state is State.WAITING
        assert ledger.verdicts() == {"pass": 1}
        assert ledger.troubles() == [("map s v1", "refused", "why")]


def test_another_key_is_done_again_and_what_is_not_asked_for_goes(tmp_path):
    with driving(tmp_path) as ledger:
        ledger.plan(_entries(3))
        for i in range(3):
            ledger.settle(f"map s v{i}", State.DONE)
        changed = [*_entries(2)[:1], *_entries(2, key="other")[1:]]
        ledger.plan(changed)
        assert [(e.job, e.state) for e in ledger.entries()] == [
            ("map s v0", State.DONE),
            ("map s v1", State.WAITING),
        ]


def test_one_driver_at_a_time_any_number_of_readers(tmp_path):
    with driving(tmp_path) as ledger:
        ledger.plan(_entries(1))
        with pytest.raises(InputError, match="another process is running this study"), driving(tmp_path):
            pass
        with reading(tmp_path) as one, reading(tmp_path) as other:
            assert one.counts() == other.counts() == {"map": {"waiting": 1}}
    with driving(tmp_path):
        pass


def test_exclusions_stay_when_the_study_is_planned_again(tmp_path):
    with driving(tmp_path) as ledger:
        ledger.plan(_entries(2))
        ledger.exclude("map s v1", "patient moved")
        ledger.plan(_entries(2, key="new"))
        assert ledger.exclusions() == {"map s v1": "patient moved"}
        ledger.exclude("map s v1", "")
        assert ledger.exclusions() == {}
        with pytest.raises(InputError, match="knows no such job"):
            ledger.exclude("map s v9", "no")


def test_a_file_is_digested_again_when_it_changes(tmp_path):
    file = tmp_path / "scan.nii"
    file.write_bytes(b"abc")
    with driving(tmp_path) as ledger:
        # SHA-256 of "abc": FIPS 180-2, appendix B.1
        assert ledger.digest_of(file) == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
        file.write_bytes(b"abd")
        os.utime(file, ns=(1, 1))
        assert not ledger.digest_of(file).startswith("ba78")


def test_a_folder_without_a_ledger_and_a_damaged_one_are_named(tmp_path):
    with pytest.raises(InputError, match="holds no ledger"), reading(tmp_path):
        pass
    assert not list(tmp_path.iterdir())
    (tmp_path / LEDGER).write_bytes(b"not a database, but long enough to look at" * 100)
    with pytest.raises(InputError, match="no ledger, or is damaged"), reading(tmp_path):
        pass


def _lines(file):
    return file.read_bytes().count(b"\n") if file.exists() else 0


def test_killed_at_random_moments_it_opens_and_keeps_what_was_told(tmp_path):
    """Law: what a driver was told is settled is settled after SIGKILL; nothing is half a row."""
    random.seed(5)
    told = tmp_path / "told"
    with driving(tmp_path) as ledger:
        ledger.plan(_entries(400))
    for _ in range(12):
        child = os.fork()
        if child == 0:
            with driving(tmp_path) as ledger, told.open("a") as out:
                for entry in ledger.entries():
                    if entry.state is not State.DONE:
                        ledger.begin(entry.job)
                        ledger.settle(entry.job, State.DONE, told={"of": entry.job}, seconds=1.0)
                        out.write(entry.job + "\n")
                        out.flush()
            os._exit(0)
        enough = _lines(told) + random.randint(1, 25)
        while _lines(told) < enough:
            time.sleep(0.001)
        time.sleep(random.uniform(0, 0.004))
        os.kill(child, signal.SIGKILL)
        os.waitpid(child, 0)
        with driving(tmp_path) as ledger:
            done = {e.job: e for e in ledger.entries() if e.state is State.DONE}
            said = set(told.read_text().split("\n")[:-1])
            assert said <= set(done)
            assert len(done) < 400  # it was killed in the middle
            assert len(done) - len(said) <= 12  # at most one a kill was settled and not said any more
            assert all(ledger.told(job) == {"of": job} and e.seconds == 1.0 for job, e in done.items())
            ledger.plan(_entries(400))
    base = sqlite3.connect(tmp_path / LEDGER)
    assert base.execute("pragma integrity_check").fetchone() == ("ok",)
    base.close()
