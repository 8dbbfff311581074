"""Run commands in forked children with little memory and time: what they said, took and left behind.

A program of its own, so that neither the memory nor the threads of the test session count.  Reads a JSON
list of ``{"name", "arguments", "folder"}`` from the file named first, writes a list of results to the second.
"""

from __future__ import annotations

import json
import os
import resource
import sys
import tempfile
import time
from pathlib import Path

MEMORY, SECONDS = 2**30, 5
os.environ["ARROW_DEFAULT_MEMORY_POOL"] = "system"  # its own pool reserves a gigabyte of addresses at once


def imported() -> None:
    """All that any reader needs, once for all children."""
    for name in (
        "volmap.pipeline", "volmap_cli.main", "volmap.io.dicom.volumes", "volmap.io.nrrd",
        "nibabel", "nrrd", "pydicom", "pydicom.pixels", "meshio", "meshio.stl", "meshio.ply", "meshio.off",
        "meshio.obj", "meshio.vtk._main", "volmap.io.vtk_xml", "vtkmodules.vtkIOXML",
        "pyarrow.csv", "pyarrow.compute", "multiprocessing.synchronize",
    ):  # fmt: skip
        __import__(name)
    from volmap_cli.main import VERBS

    for verb in VERBS:
        __import__(f"volmap_cli.{verb}")


def held(folder: Path) -> list[str]:
    return sorted(str(p.relative_to(folder)) for p in folder.rglob("*"))


def child(arguments: list[str], said: int) -> None:
    """Never returns."""
    from volmap_cli.main import main

    resource.setrlimit(resource.RLIMIT_CORE, (0, 0))
    resource.setrlimit(resource.RLIMIT_CPU, (SECONDS, SECONDS + 1))
    pages = int(Path("/proc/self/statm").read_text().split()[0])
    limit = pages * resource.getpagesize() + MEMORY
    resource.setrlimit(resource.RLIMIT_AS, (limit, limit))
    os.dup2(said, 2)
    os.dup2(os.open(os.devnull, os.O_WRONLY), 1)
    status = 99
    try:
        status = main(arguments)
    except SystemExit as stop:
        status = int(stop.code or 0)
    except BaseException:
        import traceback

        traceback.print_exc()
    sys.stderr.flush()
    os._exit(status)


def run(case: dict) -> dict:
    folder = Path(case["folder"])
    before = held(folder)
    with tempfile.TemporaryFile() as said:
        started = time.monotonic()
        pid = os.fork()
        if not pid:
            child(case["arguments"], said.fileno())
        _, ended, used = os.wait4(pid, 0)
        said.seek(0)
        words = said.read(20_000).decode("utf-8", "replace")
    return {
        "name": case["name"],
        "status": os.waitstatus_to_exitcode(ended),
        "said": words,
        "cpu_s": used.ru_utime + used.ru_stime,
        "wall_s": time.monotonic() - started,
        "most_kb": used.ru_maxrss,
        "left": [name for name in held(folder) if name not in before],
    }


if __name__ == "__main__":
    imported()
    cases = json.loads(Path(sys.argv[1]).read_text())
    Path(sys.argv[2]).write_text(json.dumps([run(case) for case in cases]))
