"""What a library run costs around its analyses, and how long the shipped library takes. Prints two tables.

    OMP_NUM_THREADS=1 python tests/benchmarks/verify.py [--circuits FOLDER] [--count N]

The first table: N dividers with two requirements each. Reading them, making tasks, judging in this process by
way of an executor, keeping the journal and writing a JUnit report, beside `verify` on circuits that are read
already; processor time of one process. The second: `loopsim verify` on the shipped circuits as a command, from
its start to its end, without a journal to go on from; wall time, and processor time of it and its workers.
"""

from __future__ import annotations

import argparse
import os
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from concurrent.futures import Executor, Future
from pathlib import Path
from typing import Any

ROOT = Path(__file__).parents[2]
sys.path[:0] = [str(ROOT), str(ROOT / "tests" / "requirements")]

from clock import median_time
from dividers import write_library

from loopsim.output.junit import junit_text
from loopsim.requirements.journal import Journal, key_of
from loopsim.requirements.library import LibraryRun, read_library, verify_library
from loopsim.requirements.verify import verify

REPEATS = 3


class Here(Executor):
    """Runs a task where it is handed over."""

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()
        future.set_result(fn(*args))
        return future


def around(count: int) -> None:
    with tempfile.TemporaryDirectory() as folder:
        library = Path(folder) / "library"
        write_library(library, count)

        def whole() -> LibraryRun:
            journal = Journal.afresh(str(Path(folder) / "journal"))
            run = verify_library([library], executor=Here(), journal=journal)
            journal.close()
            (Path(folder) / "report.xml").write_text(junit_text(run.outcomes), encoding="utf-8")
            return run

        circuits, _ = read_library([library])
        key_of("")  # the fingerprint of the tool is taken once a process
        assert len(whole().circuits) == count
        analyses = median_time(lambda: [verify(circuit) for circuit in circuits], REPEATS)
        everything = median_time(whole, REPEATS)
        remembered = median_time(lambda: _remembered(library, Path(folder) / "again"), REPEATS)
    each = 1e3 / count
    print(f"{count} circuits with two requirements, processor time a circuit\n")
    print("| | ms |\n| --- | --- |")
    print(f"| analyses | {analyses * each:.1f} |")
    print(f"| whole run | {everything * each:.1f} |")
    print(f"| overhead | {(everything - analyses) * each:.1f} |")
    print(f"| a run that finds all in the journal | {remembered * each:.1f} |\n")


def _remembered(library: Path, path: Path) -> None:
    journal = Journal.resume(str(path))
    verify_library([library], executor=Here(), journal=journal)
    journal.close()


def shipped(folder: Path) -> None:
    print("| workers | wall time | processor time | outcome |\n| --- | --- | --- | --- |")
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "OMP_NUM_THREADS": "1"}
    for jobs in (1, 2):
        with tempfile.TemporaryDirectory() as place:
            command = [sys.executable, "-m", "loopsim", "verify", str(folder), "--jobs", str(jobs)]
            before, began = resource.getrusage(resource.RUSAGE_CHILDREN), time.monotonic()
            done = subprocess.run(command, capture_output=True, text=True, env=environment, cwd=place, check=False)
            wall, after = time.monotonic() - began, resource.getrusage(resource.RUSAGE_CHILDREN)
        used = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
        print(f"| {jobs} | {wall:.1f} s | {used:.1f} s | {done.stdout.splitlines()[-1]} |")


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--circuits", type=Path, default=ROOT / "circuits")
    parser.add_argument("--count", type=int, default=60)
    given = parser.parse_args()
    around(given.count)
    shipped(given.circuits.resolve())
