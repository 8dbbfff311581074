"""Broken inputs: files that cannot be read, or are not what their name says."""

from __future__ import annotations

import gzip

import numpy as np

from .broken import Bench, BrokenInput
from .writer import save_labels

FILE = "scan.nii.gz"


def make(bench: Bench) -> list[BrokenInput]:
    """Write them all."""
    whole = bench.good("whole-file", "source").read_bytes()
    (bench.folder / "whole-file" / "source.nii.gz").unlink()
    (bench.folder / "whole-file").rmdir()
    noise = np.random.default_rng(0).integers(0, 256, 4000, np.uint8).tobytes()
    middle = len(whole) // 2
    contents = {
        "not-nifti": (noise, "random bytes under the name of a scan", "nifti|gzip|packed|damaged"),
        "gzip-cut": (whole[:middle], "a packed file cut off in the middle", "cut short|damaged|truncated"),
        "gzip-damaged": (
            whole[:middle] + bytes(b ^ 0xFF for b in whole[middle : middle + 40]) + whole[middle + 40 :],
            "a packed file with damaged bytes",
            "damaged|corrupt",
        ),
        "gzip-of-text": (
            gzip.compress(b"not a scan\n" * 200, mtime=0),
            "packed text under the name of a scan",
            "nifti",
        ),
        "empty-file": (b"", "a file of no bytes", "empty"),
    }
    entries = []
    for name, (content, fault, words) in contents.items():
        bench.place(name, FILE).write_bytes(content)
        entries.append(_entry(bench, name, fault, FILE, words))
    return entries + _unpacked(bench) + _absent(bench)


def _unpacked(bench: Bench) -> list[BrokenInput]:
    text = bench.place("text-file", "scan.nii")
    text.write_text("organ,volume\nliver,1800\n" * 40, encoding="utf-8")
    picture = bench.place("picture-file", "scan.png")
    picture.write_bytes(b"\x89PNG\r\n\x1a\n" + bytes(800))
    cut = bench.place("voxels-cut", "scan.nii")
    save_labels(bench.source, cut)
    cut.write_bytes(cut.read_bytes()[:20_000])
    header = bench.place("header-cut", "scan.nii")
    header.write_bytes(cut.read_bytes()[:200])
    return [
        _entry(bench, "text-file", "a text file renamed to .nii", "scan.nii", "nifti"),
        _entry(bench, "picture-file", "a picture instead of a scan", "scan.png", "nifti"),
        _entry(
            bench, "voxels-cut", "a file that ends before its last voxel", "scan.nii", "cut short|truncated"
        ),
        _entry(
            bench, "header-cut", "a file that ends inside its header", "scan.nii", "cut short|truncated|nifti"
        ),
    ]


def _absent(bench: Bench) -> list[BrokenInput]:
    bench.place("missing-file", FILE)
    bench.place("folder-for-file", FILE).mkdir(exist_ok=True)
    return [
        _entry(bench, "missing-file", "a file that is not there", FILE, "no such file|not there|not found"),
        _entry(bench, "folder-for-file", "a folder where a file should be", FILE, "folder|directory"),
    ]


def _entry(bench: Bench, name: str, fault: str, file: str, words: str) -> BrokenInput:
    return BrokenInput(name, fault, ("screen", str(bench.folder / name / file)), file, 3, (words,))
