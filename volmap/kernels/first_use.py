"""What `volmap map` needs compiled, so that a machine's first run compiles it on all its cores at once.

Numba compiles in one thread of one process, however many there are.  Before a first run, processes of this
program each take some families of the kernels below and leave them in numba's cache on disk, and the run
loads them from there.  A kernel that is not in the table is compiled when it is called: the table decides
about time, never about results, and a process that fails costs time only.
"""

from __future__ import annotations

import os
import subprocess
import sys
from importlib import import_module
from typing import Any, NamedTuple

import numba
from numba.core import types
from numba.core.registry import cpu_target

_ELEMENTS: dict[str, Any] = {
    "f8": types.float64,
    "f4": types.float32,
    "i8": types.int64,
    "i4": types.int32,
    "u2": types.uint16,
    "b1": types.boolean,
}

# A type is an element (f8: a number), an array of it in C order (f8:2: two axes; r: read-only), or a noun.
_NOUNS = """
blocksystem.Pattern i4:2 i4:2 i4:1 i4:1 i4:2 i4:1 i4:1 i4:1 i4:1 i4:1
closest.Tree f8:2 f8:2 i8:1 i8:1 i8:1 i8:1
contact._Cells i8:2 closest.Tree f8:2
contact.Pairs i8:2 f8:2 f8:2 b1:1
labelfield.LabelField u2:3 f8:1 f8:1 f8:1
labelfield.Scratch i8:1 f8:2 f8:3 f8:1 f8:2 f8:2 f8:1
observations.Observations i8:2 f8:2 i8:2 f8:2 f8:2 f8:1 f8:1
stars.Stars f8:2 i8:2 i8:1 i8:1 i8:1 f8:1
strata.Strata i8:1 i8:2 i8:1 i8:1 i8:2 i8:2 f8:2 f8:1
ties.Ties i8:2 f8:2 f8:2 f8:1
"""

# A family shares inner kernels, which each process compiles for itself.  First its share of all the time, in
# per cent (`tests/bench/compiling.py` prints it), to share families out evenly, and the stage it is for.
_FAMILIES = """
27 mesh
relocate.relax labelfield.LabelField stars.Stars strata.Strata f8 f8:1 f8:1 f8:1 labelfield.Scratch
relocate.search labelfield.LabelField stars.Stars strata.Strata f8 f8 f8:2 f8:2 labelfield.Scratch
labelfield.cut_edges labelfield.LabelField f8:2 i8:2 i8:2 labelfield.Scratch
labelfield.owners labelfield.LabelField f8:2 labelfield.Scratch
labelfield.voxel_changes labelfield.LabelField f8:2 i8:1 i8:2 i8
snap._snap stars.Stars i8:1 f8:2 f8:1 i8:1 b1:1

7 mesh
lattice._fill_lengths f8:2 i8:2 f8:1
lattice._split i8:2 i8:2 i8:2 i8:1 i8:2 i8:1 i8:2 i8:1 i8:2
tets._fill_volumes f8:2 i8:2 f8:1
topology._fill_edges i8:2 i8:1 i8:1 i8:2 i8:2
topology._fill_faces i8:2 i8:1 i8:1 i8:2 i8:2 b1:1
topology._fill_incidence i8:2 i8:1 i8:1
topology._fill_label_sets i8:2 i8:1 i8:2

11 map
distortion._distort i8 i8 i8 f8:2 i8:2 f8:3 f8:1 b1 f8:1 f8:3 f4:4
steps._step_bounds i8 i8 f8:2 f8:2 i8:2 f8 f8:1

8 map
blocksystem._gather_edges i8 i8 i4:1 i4:1 i4:2 f4:4 f4:3
blocksystem._gather_points i8 i8 i4:1 i4:1 i4:1 i4:1 f8:3 f8:2 f4:3
blocksystem._multiply i8 i8 i4:1 i4:1 f4:3 f8:2 f8:2
observations.add_pull observations.Observations f8:2 blocksystem.Pattern f8:2 f4:3
observations.misfit observations.Observations f8:2
ties.add_diagonal ties.Ties f8:3
ties.add_product ties.Ties f8:2 f8:2

14 map
barrier.add_barrier contact.Pairs f8 f8 f8:2 f8:2 f8:1
closest._closest_from i8 i8 closest.Tree f8:2 i8:2 f8:2 i8:1 i8:1 f8:2 f8:1
closest.refit closest.Tree f8:2 i8:2
contact._measure contact.Pairs f8:2 f8:2 f8:2
contact._sweep closest.Tree i8:2 f8:2 f8:2 f8:2
contact._visit i8 i8 b1 b1 contact._Cells contact._Cells i8:1 f8:2 f8:2 f8 f8:1 i8:2
contact.longest_step_of contact.Pairs f8:2 f8:2

12 map
crossings._crossing_pairs f8:2 i8:2 f8:2 f8:2 i8:2 i8:2
predicates._signs f8:2 i8:2

12 map
barycentric.barycentric_rows f8:2 i8:2
locate._search i8 i8 f8:3 f8:1 f8 i8:1 i8:1 i8:1 f8:2 i8:1 i8:1 f8:2
locate._sort_into_boxes f8:2 i8:2 f8:3 f8:1 f8 i8:1
rasterise._draw i8 i8 f8:3 i4:2 i4:2 i8:1 i4:1 i4:3
rasterise._paint i8 i8 f8:3 i4:2 i4:2 i8:1 i4:1 i8:2 f8:2 i8 f4:4
rasterise.tets_by_plane i4:2 i4:2 i8

9 map
folds.smallest_determinants i8 i8 f4:4r f8:2 f8:3
trilinear._go_and_return i8 i8 f4:4r f4:4r f8:2 f8:2 f4:3
trilinear._sample i8 i8 f4:4r f8:2 f8:2
zbuffer._fill f8:2 i8:2 f8:3 f4:3 f8:2 i8:2
zbuffer._mark_rims i8:2 f8:2 f8 b1:2
"""

# Each process holds about 150 MB and spends half a second on its start.
_MOST_PROCESSES = 4

_CHILD = "from volmap.kernels.first_use import compile_families; compile_families({})"


class Family(NamedTuple):
    """Kernels that share inner kernels, and the types that `volmap map` calls them with.

    Attributes
    ----------
    percent : int
        Of the time that all families take to compile.
    stage : str
        'mesh' or 'map'; a map needs both.
    kernels : tuple of (str, tuple of str)
        ``module.function`` and the codes of its arguments.
    """

    percent: int
    stage: str
    kernels: tuple[tuple[str, tuple[str, ...]], ...]


def families() -> list[Family]:
    """All that `volmap map` compiles."""
    found = []
    for paragraph in _FAMILIES.strip().split("\n\n"):
        first, *lines = paragraph.splitlines()
        percent, stage = first.split()
        kernels = tuple((name, tuple(codes)) for name, *codes in (line.split() for line in lines))
        found.append(Family(int(percent), stage, kernels))
    return found


def kernel_named(name: str) -> Any:
    """The kernel ``module.function``."""
    module, function = name.split(".")
    return getattr(import_module(f"volmap.kernels.{module}"), function)


def type_of(code: str) -> types.Type:
    """What numba calls the type of a code in the table."""
    if "." in code:
        held = {noun: codes for noun, *codes in (line.split() for line in _NOUNS.strip().splitlines())}
        return types.BaseTuple.from_types([type_of(c) for c in held[code]], kernel_named(code))
    element, _, axes = code.partition(":")
    if not axes:
        return _ELEMENTS[element]
    return types.Array(_ELEMENTS[element], int(axes[0]), "C", readonly=axes.endswith("r"))


def not_compiled_yet(stages: tuple[str, ...] = ("mesh", "map")) -> list[int]:
    """Numbers of the families of which numba's cache does not hold all for this processor and this Python."""
    codegen = cpu_target.target_context.codegen()
    return [
        number
        for number, family in enumerate(families())
        if family.stage in stages
        and not all(_in_cache(kernel_named(name), codes, codegen) for name, codes in family.kernels)
    ]


def _in_cache(kernel: Any, codes: tuple[str, ...], codegen: Any) -> bool:
    signature = tuple(type_of(code) for code in codes)
    if signature in kernel.overloads:
        return True
    cache = kernel._cache
    held = getattr(cache, "_cache_file", None)  # a kernel without a place on disk has none
    return held is None or cache._index_key(signature, codegen) in held._load_index()


def compile_families(numbers: list[int]) -> None:
    """Compile some families in this process and leave them on disk."""
    for number in numbers:
        for name, codes in families()[number].kernels:
            kernel_named(name).compile(tuple(type_of(code) for code in codes))


def compile_on_all_cores(numbers: list[int]) -> None:
    """Compile some families, shared out over this process and others of its kind.

    Parameters
    ----------
    numbers : list of int
        From `not_compiled_yet`.  As many processes take part as kernels may use threads, up to four.
    """
    shares = _shares(numbers, min(int(numba.get_num_threads()), _MOST_PROCESSES, len(numbers)))
    path = os.pathsep.join(p for p in sys.path if p)
    others: list[subprocess.Popen[bytes]] = []
    try:
        for share in shares[1:]:
            others.append(_start(share, path))
        compile_families(shares[0])
        for other in others:
            other.wait()
    finally:
        for other in others:
            other.kill()
            other.wait()


def _start(share: list[int], path: str) -> subprocess.Popen[bytes]:
    return subprocess.Popen(
        [sys.executable, "-c", _CHILD.format(share)],
        env=os.environ | {"PYTHONPATH": path},
        stdin=subprocess.DEVNULL,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )


def _shares(numbers: list[int], processes: int) -> list[list[int]]:
    """Longest families first, each to the process with the least to do so far."""
    percent = [family.percent for family in families()]
    shares: list[list[int]] = [[] for _ in range(max(processes, 1))]
    for number in sorted(numbers, key=lambda n: -percent[n]):
        min(shares, key=lambda share: sum(percent[n] for n in share)).append(number)
    return shares
