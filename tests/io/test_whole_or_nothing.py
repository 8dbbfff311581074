"""Files and folders appear whole or not at all."""

import errno
import os

import pytest

from volmap.io.atomic import whole_file, whole_folder
from volmap.types import InputError


def interrupted(context, fault):
    """Write half of something, then fail."""
    with context as temporary:
        half = temporary / "half.txt" if temporary.is_dir() else temporary
        half.write_text("half")
        raise fault


def overtaken(path):
    """Write a file while somebody else writes it too."""
    with whole_file(path) as temporary:
        temporary.write_text("mine")
        path.write_text("another's")


def names(folder):
    return sorted(p.name for p in folder.iterdir())


def test_a_file_appears_when_the_block_ends(tmp_path):
    with whole_file(tmp_path / "ä.nii.gz") as temporary:
        temporary.write_text("x")
        assert temporary.name.endswith(".nii.gz")
        assert not (tmp_path / "ä.nii.gz").exists()
    assert names(tmp_path) == ["ä.nii.gz"]


@pytest.mark.parametrize("fault", [ValueError, KeyboardInterrupt, SystemExit])
def test_nothing_is_left_after_a_fault_or_an_interrupt(tmp_path, fault):
    with pytest.raises(fault):
        interrupted(whole_file(tmp_path / "a.txt"), fault)
    with pytest.raises(fault):
        interrupted(whole_folder(tmp_path / "b"), fault)
    assert names(tmp_path) == []


def test_what_was_there_stays_after_a_fault(tmp_path):
    (tmp_path / "a.txt").write_text("old")
    (tmp_path / "b").mkdir()
    (tmp_path / "b" / "old.txt").write_text("old")
    with pytest.raises(KeyboardInterrupt):
        interrupted(whole_file(tmp_path / "a.txt", overwrite=True), KeyboardInterrupt)
    with pytest.raises(KeyboardInterrupt):
        interrupted(whole_folder(tmp_path / "b", overwrite=True), KeyboardInterrupt)
    assert (tmp_path / "a.txt").read_text() == "old"
    assert names(tmp_path / "b") == ["old.txt"]
    assert names(tmp_path) == ["a.txt", "b"]


def test_a_place_that_is_taken_is_refused_unless_overwriting(tmp_path):
    (tmp_path / "a.txt").write_text("old")
    with pytest.raises(InputError, match="exists"), whole_file(tmp_path / "a.txt"):
        pytest.fail("the block must not run")
    with whole_file(tmp_path / "a.txt", overwrite=True) as temporary:
        temporary.write_text("new")
    assert (tmp_path / "a.txt").read_text() == "new"


def test_a_folder_is_replaced_whole(tmp_path):
    (tmp_path / "m").mkdir()
    (tmp_path / "m" / "certificate.json").write_text("{}")
    with pytest.raises(InputError, match="exists"), whole_folder(tmp_path / "m"):
        pytest.fail("the block must not run")
    with whole_folder(tmp_path / "m", overwrite=True, holding="certificate.json") as folder:
        (folder / "new.txt").write_text("new")
    assert names(tmp_path / "m") == ["new.txt"]
    assert names(tmp_path) == ["m"]
    with (
        pytest.raises(InputError, match="left alone"),
        whole_folder(tmp_path / "m", overwrite=True, holding="certificate.json"),
    ):
        pytest.fail("the block must not run")


def test_an_empty_folder_may_be_filled(tmp_path):
    (tmp_path / "m").mkdir()
    with whole_folder(tmp_path / "m") as folder:
        (folder / "a").touch()
    assert names(tmp_path / "m") == ["a"]


def test_a_place_taken_meanwhile_is_not_overwritten(tmp_path):
    with pytest.raises(InputError, match="exists"):
        overtaken(tmp_path / "a.txt")
    assert (tmp_path / "a.txt").read_text() == "another's"
    assert names(tmp_path) == ["a.txt"]


def test_no_folder_to_write_in_and_the_wrong_kind_of_place(tmp_path):
    with pytest.raises(InputError, match="does not exist"), whole_file(tmp_path / "no" / "a.txt"):
        pytest.fail("the block must not run")
    (tmp_path / "f").touch()
    with pytest.raises(InputError, match="taken"), whole_folder(tmp_path / "f", overwrite=True):
        pytest.fail("the block must not run")
    (tmp_path / "d").mkdir()
    with pytest.raises(InputError, match="taken"), whole_file(tmp_path / "d", overwrite=True):
        pytest.fail("the block must not run")


@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EACCES])
def test_a_full_disk_or_no_permission_is_an_input_error(tmp_path, number):
    with pytest.raises(InputError, match="cannot be written"), whole_file(tmp_path / "a.txt"):
        raise OSError(number, os.strerror(number))
    assert names(tmp_path) == []


def test_the_old_folder_comes_back_when_the_new_one_cannot_be_placed(tmp_path, monkeypatch):
    (tmp_path / "m").mkdir()
    (tmp_path / "m" / "old").touch()
    rename, calls = os.rename, []

    def second_fails(a, b):
        calls.append(a)
        if len(calls) == 2:
            raise OSError(errno.EIO, "Input/output error")
        rename(a, b)

    monkeypatch.setattr(os, "rename", second_fails)
    with pytest.raises(InputError), whole_folder(tmp_path / "m", overwrite=True) as folder:
        (folder / "new").touch()
    assert names(tmp_path / "m") == ["old"]
    assert names(tmp_path) == ["m"]
