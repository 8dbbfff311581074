"""The table of what a first run compiles: against what a run calls, and against the kernels themselves."""

import os
import subprocess
import sys

import numba
import numpy as np
import pytest

from volmap.kernels import first_use
from volmap.kernels.ties import Ties

# Maps the pair of the session once more, in a process in which nothing else has been called.
CALLED = """
import gc, sys
from pathlib import Path
from numba.core.dispatcher import Dispatcher
from volmap import pipeline
from volmap.kernels import first_use

job = pipeline.MapJob(mesh=pipeline.MeshSettings(wanted_tets=4000))
pipeline.map_files(Path(sys.argv[1]), Path(sys.argv[2]), Path(sys.argv[3]), job)
called = set()
for kernel in gc.get_objects():
    if isinstance(kernel, Dispatcher):
        function = kernel.py_func
        if function.__module__.startswith("volmap.") and hasattr(kernel._cache, "_cache_file"):
            called |= {(f"{function.__module__}.{function.__qualname__}", s) for s in kernel.signatures}
listed = {
    (f"volmap.kernels.{name}", tuple(first_use.type_of(code) for code in codes))
    for family in first_use.families()
    for name, codes in family.kernels
}
print("called but not listed:", sorted(map(str, called - listed)))
print("listed but not called:", sorted(map(str, listed - called)))
print(len(called), "called")
"""


def test_the_table_holds_what_a_map_calls_and_no_more(small_pair, tmp_path):
    command = [
        sys.executable,
        "-c",
        CALLED,
        str(small_pair.source),
        str(small_pair.target),
        str(tmp_path / "m"),
    ]
    told = subprocess.run(command, capture_output=True, text=True, check=True).stdout
    assert "called but not listed: []" in told
    assert "listed but not called: []" in told
    assert f"{sum(len(f.kernels) for f in first_use.families())} called" in told


def test_every_kernel_of_the_table_takes_that_many_arguments():
    for family in first_use.families():
        for name, codes in family.kernels:
            assert first_use.kernel_named(name).py_func.__code__.co_argcount == len(codes), name
            assert all(isinstance(first_use.type_of(code), numba.types.Type) for code in codes)


def test_types_are_those_numba_gives_the_arrays():

    given = {
        "f8": 1.5,
        "i8": 3,
        "b1": True,
        "f8:2": np.zeros((2, 2)),
        "u2:3": np.zeros((1, 1, 1), np.uint16),
        "ties.Ties": Ties(np.zeros((1, 2), np.int64), np.zeros((1, 3)), np.zeros((1, 3)), np.zeros(1)),
    }
    for code, value in given.items():
        assert first_use.type_of(code) == numba.typeof(value), code
    fixed = np.zeros((1, 1, 1, 3), np.float32)
    fixed.setflags(write=False)
    assert first_use.type_of("f4:4r") == numba.typeof(fixed)


@pytest.mark.parametrize("processes", [1, 2, 3, 4])
def test_each_family_is_compiled_by_one_process(processes):
    everything = list(range(len(first_use.families())))
    shares = first_use._shares(everything, processes)
    assert len(shares) == processes
    assert sorted(number for share in shares for number in share) == everything
    assert all(shares)


def test_processes_leave_in_the_cache_what_this_one_then_finds(tmp_path):
    """Two small families in an empty cache: both are there afterwards, and nothing is left to compile."""
    code = (
        "import numba\n"
        "from volmap.kernels import first_use\n"
        "every = first_use.families()\n"
        "small = sorted(range(len(every)), key=lambda n: every[n].percent)[:2]\n"
        "assert set(small) <= set(first_use.not_compiled_yet())\n"
        "numba.set_num_threads(min(2, numba.config.NUMBA_NUM_THREADS))\n"
        "first_use.compile_on_all_cores(small)\n"
        "assert not set(small) & set(first_use.not_compiled_yet())\n"
        "kernels = [first_use.kernel_named(name) for n in small for name, _ in every[n].kernels]\n"
        "print(sum(bool(kernel.signatures) for kernel in kernels), len(kernels))\n"
    )
    environment = {"NUMBA_CACHE_DIR": str(tmp_path), "NUMBA_NUM_THREADS": "2"}
    told = subprocess.run(
        [sys.executable, "-c", code], env=os.environ | environment, capture_output=True, text=True, check=True
    ).stdout.split()
    assert int(told[0]) < int(told[1])  # the other process compiled the rest
