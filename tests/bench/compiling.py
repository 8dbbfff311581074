"""What compiling costs: ``python tests/bench/compiling.py [--processes N] [--edge MM] [--rows N]``.

Runs ``volmap map A B --out m`` (gel-column, few tets) in a fresh process with an empty cache of compiled
kernels, then once more in another process with the cache the first one left.  The first run compiles in as
many processes as it has cores (``--processes``) before it begins: told are its wall time and the processor
time of all of them.  What this process compiles comes from numba's own events, in processor seconds of the
main thread, so that other work on the machine hardly enters; with one process that is every kernel, and the
share of each family (`volmap.kernels.first_use`) is printed.  The result is printed and stored in
``tests/bench/compiling.json``.
"""

from __future__ import annotations

import argparse
import gc
import json
import os
import platform
import subprocess
import sys
import tempfile
import threading
import time
from pathlib import Path

HERE = Path(__file__).parent


class Ledger:
    """Hears numba's events: what is compiled, what is only loaded, and how long either takes.

    ``numba:compiler_lock`` brackets every compilation and every load of a cached kernel, ``numba:compile``
    the compilations alone.  Both nest, as a kernel compiles those it calls: the outermost bracket counts,
    and a kernel's own seconds are those of its bracket less those of the brackets inside.
    """

    def __init__(self) -> None:
        self.bracketed = 0.0  # seconds in the compiler, loads of cached kernels included
        self.compiled = 0.0  # seconds compiling
        self.own: dict[str, float] = {}
        self.count: dict[str, int] = {}
        self._depth = 0
        self._began = 0.0
        self._stack: list[list] = []  # name, start, seconds of what it compiled in turn

    def listen(self) -> None:
        """Register with numba; the main thread is heard only, as others load kernels while it waits."""
        from numba.core import event

        event.register("numba:compiler_lock", _Heard(self._enter, self._leave))
        event.register("numba:compile", _Heard(self._start, self._end))

    def _enter(self, _data) -> None:
        if self._depth == 0:
            self._began = time.thread_time()
        self._depth += 1

    def _leave(self, _data) -> None:
        self._depth -= 1
        if self._depth == 0:
            self.bracketed += time.thread_time() - self._began

    def _start(self, data) -> None:
        function = data["dispatcher"].py_func
        self._stack.append([f"{function.__module__}.{function.__qualname__}", time.thread_time(), 0.0])

    def _end(self, _data) -> None:
        name, began, inner = self._stack.pop()
        spent = time.thread_time() - began
        self.own[name] = self.own.get(name, 0.0) + spent - inner
        self.count[name] = self.count.get(name, 0) + 1
        if self._stack:
            self._stack[-1][2] += spent
        else:
            self.compiled += spent


def _Heard(start, end):  # noqa: N802 - makes a class of numba's, which is imported late to time its import
    from numba.core import event

    class Heard(event.Listener):
        def on_start(self, heard) -> None:
            if threading.current_thread() is threading.main_thread():
                start(heard.data)

        def on_end(self, heard) -> None:
            if threading.current_thread() is threading.main_thread():
                end(heard.data)

    return Heard()


def yardstick() -> float:
    """Seconds of a fixed piece of Python: by how much other work slows this machine down just now."""
    begin, total = time.thread_time(), 0
    for i in range(3_000_000):
        total += i * i % 7
    return time.thread_time() - begin


def _processor_s() -> float:
    """Processor seconds of this process and of those it has waited for."""
    spent = os.times()
    return spent.user + spent.system + spent.children_user + spent.children_system


def child(out: Path, arguments: list[str]) -> None:
    """Run the command in this process and write what compiling cost it."""
    begin = time.process_time()
    import numba

    imported = time.process_time() - begin
    ledger = Ledger()
    ledger.listen()
    from numba.core.dispatcher import Dispatcher
    from volmap_cli.main import main

    from volmap.kernels import first_use

    yardsticks = [yardstick()]
    begin_wall, begin_processor = time.perf_counter(), _processor_s()
    missing = first_use.not_compiled_yet()
    shares = {}
    if int(numba.get_num_threads()) == 1:
        for number in missing:
            before = _processor_s()
            first_use.compile_families([number])
            shares[str(number)] = _processor_s() - before
    elif missing:
        first_use.compile_on_all_cores(missing)
    before_all = {"wall_s": time.perf_counter() - begin_wall, "processor_s": _processor_s() - begin_processor}
    compiled_before = ledger.compiled
    begin = time.process_time()
    status = main(arguments)
    spent = time.process_time() - begin
    yardsticks.append(yardstick())
    loaded, own = 0, {}
    for thing in gc.get_objects():
        if not isinstance(thing, Dispatcher) or not thing.signatures:
            continue
        loaded += sum(thing.stats.cache_hits.values())
        function = thing.py_func
        name = f"{function.__module__}.{function.__qualname__}"
        if name.startswith("volmap"):
            own[name] = own.get(name, 0) + len(thing.signatures)
    document = {
        "numba": numba.__version__,
        "exit_status": status,
        "yardstick_s": yardsticks,
        "import_numba_s": imported,
        "command_cpu_s": spent,
        "before_all": before_all | {"families_s": shares},
        "compiled_when_called_s": ledger.compiled - compiled_before,
        "compiling_s": ledger.compiled,
        "loading_or_storing_s": ledger.bracketed - ledger.compiled,
        "functions_compiled": len(ledger.count),
        "specialisations_compiled": sum(ledger.count.values()),
        "specialisations_loaded": loaded,
        "own_functions": len(own),
        "own_more_than_once": {k: n for k, n in sorted(own.items()) if n > 1},
        "dearest": [
            {"function": name, "times": ledger.count[name], "own_s": round(seconds, 3)}
            for name, seconds in sorted(ledger.own.items(), key=lambda item: -item[1])
        ],
    }
    out.write_text(json.dumps(document))


def _run(folder: Path, name: str, arguments: list[str], processes: int) -> dict:
    out = folder / f"{name}.json"
    environment = os.environ | {"NUMBA_CACHE_DIR": str(folder / "cache"), "NUMBA_NUM_THREADS": str(processes)}
    command = [sys.executable, __file__, "--child", str(out), *arguments, "--out", str(folder / name)]
    with (folder / f"{name}.log").open("w") as log:
        subprocess.run(command, env=environment, check=False, stdout=log, stderr=log)
    if not out.exists():
        sys.exit((folder / f"{name}.log").read_text())
    return json.loads(out.read_text())


def measure(edge_mm: float, processes: int) -> dict:
    """Both runs on a small pair."""
    with tempfile.TemporaryDirectory() as temporary:
        folder = Path(temporary)
        subprocess.run(
            [
                sys.executable,
                "-m",
                "volmap_cli.main",
                "phantom",
                "gel-column",
                "--out",
                folder / "scans",
                "--quiet",
            ],
            check=True,
            stdout=subprocess.DEVNULL,
        )
        scans = [str(folder / "scans" / f"visit{i}_labels.nii.gz") for i in (0, 1)]
        arguments = ["map", *scans, "--edge", str(edge_mm)]
        first, second = (_run(folder, name, arguments, processes) for name in ("first", "second"))
        held = [f for f in (folder / "cache").rglob("*") if f.is_file()]
        size_mb = sum(f.stat().st_size for f in held) / 1e6
    return {
        "processes": processes,
        "processor": platform.processor() or platform.machine(),
        "cache_mb": size_mb,
    } | {
        "first": first,
        "second": second | {"dearest": second["dearest"][:10]},
    }


def show(result: dict, rows: int) -> None:
    """Print both runs and the dearest functions."""
    for name in ("first", "second"):
        run = result[name]
        ahead = run["before_all"]
        print(
            f"{name:>6}: compiling before all {ahead['wall_s']:.2f} s wall, {ahead['processor_s']:.2f} s of "
            f"all processes; when called {run['compiled_when_called_s']:.2f} s; "
            f"in the main process {run['compiling_s']:.2f} s, "
            f"loading or storing {run['loading_or_storing_s']:.2f} s, "
            f"yardstick {sum(run['yardstick_s']) / 2:.3f} s, "
            f"import numba {run['import_numba_s']:.2f} s, whole command {run['command_cpu_s']:.2f} s; "
            f"{run['functions_compiled']} functions and {run['specialisations_compiled']} specialisations "
            f"compiled, {run['specialisations_loaded']} loaded; exit {run['exit_status']}"
        )
    print(f"cache: {result['cache_mb']:.1f} MB; {result['first']['own_functions']} kernels of our own")
    print("compiled more than once:", result["first"]["own_more_than_once"])
    seconds = result["first"]["before_all"]["families_s"]
    for number, spent in seconds.items():
        print(f"family {number}: {spent:6.2f} s, {100 * spent / sum(seconds.values()):3.0f} %")
    for row in result["first"]["dearest"][:rows]:
        print(f"{row['own_s']:8.3f} s  {row['times']:3d} x  {row['function']}")


if __name__ == "__main__":
    if "--child" in sys.argv:
        child(Path(sys.argv[2]), sys.argv[3:])
        sys.exit()
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--edge", type=float, default=6.0, help="mesh edge, mm")
    parser.add_argument("--processes", type=int, default=len(os.sched_getaffinity(0)))
    parser.add_argument("--rows", type=int, default=40, help="functions to print")
    options = parser.parse_args()
    measured = measure(options.edge, options.processes)
    show(measured, options.rows)
    (HERE / "compiling.json").write_text(json.dumps(measured, indent=1) + "\n")
