"""Workers: a child that dies costs the task it held and nothing else."""

import os
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from dying import leaves, prints, process, raises, sleeps, stuck, threads

from loopsim.requirements.wall import Overrun, within_wall
from loopsim.requirements.workers import WorkerDied, WorkerPool

ROOT = Path(__file__).parents[2]


@pytest.fixture
def pool() -> Iterator[WorkerPool]:
    with WorkerPool(1) as made:
        yield made
        made.stop()


def test_a_death_is_told_with_its_code_and_the_next_task_gets_a_new_worker(pool: WorkerPool) -> None:
    before = pool.submit(process)
    dead = pool.submit(leaves, 7)
    after = pool.submit(process)
    with pytest.raises(WorkerDied, match="ended with exit code 7"):
        dead.result()
    assert before.result() != after.result()


def test_a_task_that_nothing_else_stops_ends_with_its_worker(pool: WorkerPool) -> None:
    with pytest.raises(WorkerDied, match="ended with exit code 1"):
        pool.submit(stuck, 0.2).result(timeout=30.0)


def test_what_a_task_prints_or_raises_stays_apart_from_its_answer(pool: WorkerPool) -> None:
    assert pool.submit(prints, "one\n").result() == "one\n"
    with pytest.raises(ValueError, match="two"):
        pool.submit(raises, "two").result()
    with pytest.raises(Exception, match=r"[Pp]ickle|local object|lambda"):
        pool.submit(lambda: 3).result()
    assert pool.submit(prints, "three").result() == "three"


def test_a_worker_runs_one_linear_algebra_thread_whatever_the_caller_has(
    pool: WorkerPool, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("OPENBLAS_NUM_THREADS", "4")
    assert set(pool.submit(threads).result().values()) == {"1"}


def test_workers_are_as_many_as_asked_for_and_used_again() -> None:
    with WorkerPool(2) as pool:
        pids = {future.result() for future in [pool.submit(sleeps, 0.05) for _ in range(6)]}
    assert len(pids) == 2


def test_stop_does_not_wait_for_the_task_at_hand() -> None:
    pool = WorkerPool(1)
    running, waiting = pool.submit(sleeps, 60.0), pool.submit(sleeps, 60.0)
    while not pool._children:
        time.sleep(0.01)
    pool.stop()
    assert isinstance(running.exception(timeout=5.0), WorkerDied)
    assert waiting.cancelled()
    with pytest.raises(RuntimeError):
        pool.submit(process)


@pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="looks at processes by /proc")
def test_workers_end_when_their_caller_is_killed() -> None:
    program = (
        "import sys, time; from dying import process, sleeps; from loopsim.requirements.workers import WorkerPool\n"
        "pool = WorkerPool(1); print(pool.submit(process).result(), flush=True); pool.submit(sleeps, 60.0); time.sleep(60)"
    )
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join([str(ROOT), str(Path(__file__).parent)])}
    with subprocess.Popen([sys.executable, "-c", program], stdout=subprocess.PIPE, text=True, env=environment) as caller:
        assert caller.stdout is not None
        worker = int(caller.stdout.readline())
        caller.kill()
    deadline = time.monotonic() + 10.0
    while _alive(worker) and time.monotonic() < deadline:
        time.sleep(0.02)
    assert not _alive(worker)


def _alive(pid: int) -> bool:
    try:
        return Path(f"/proc/{pid}/stat").read_text(encoding="ascii").rpartition(") ")[2][0] not in "ZX"
    except FileNotFoundError:
        return False


def test_a_call_past_its_wall_time_is_stopped_and_leaves_nothing_behind() -> None:
    def turns() -> int:
        count = 0
        while True:
            try:
                count += 1
            except Exception:
                count -= 1

    began = time.monotonic()
    with pytest.raises(Overrun):
        within_wall(0.1, turns)
    assert time.monotonic() - began < 5.0
    for _ in range(200):  # the limit falls at the very end of the call: it arrives within it, or never
        try:
            assert within_wall(1e-4, lambda: sum(range(500)))
        except Overrun:
            continue
    assert sum(range(100_000)) == 4_999_950_000
