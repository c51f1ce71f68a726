"""Library runs: any executor, any number of workers, any order of completion; one circuit's trouble stays its own."""

import json
import os
import random
from concurrent.futures import Executor, Future, ProcessPoolExecutor, ThreadPoolExecutor
from dataclasses import replace
from multiprocessing import get_context
from pathlib import Path

import pytest
from dividers import circuit_text, write_library
from dying import Deadly

from loopsim.requirements.judging import Options, judge, read_record, task_text
from loopsim.requirements.library import circuit_files, read_library, verify_circuits, verify_library
from loopsim.requirements.outcomes import RANK


@pytest.fixture
def library(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Six dividers, of which the third is off by a volt."""
    monkeypatch.chdir(tmp_path)
    write_library(tmp_path / "lib", 6)
    return tmp_path / "lib"


class Shuffled(Executor):
    """Runs every task when it is handed over, and finishes them in another order."""

    def submit(self, fn, /, *args, **kwargs) -> Future[str]:
        assert not kwargs
        future: Future[str] = Future()
        self.held = [*getattr(self, "held", []), (future, fn(*args))]
        if len(self.held) == 3:
            random.Random(5).shuffle(self.held)
            for other, answer in self.held:
                other.set_result(answer)
            self.held = []
        return future


def words(run) -> list[tuple[str, str, str]]:
    return [(o.circuit, o.label, o.outcome) for o in run.outcomes]


def timeless(run) -> str:
    return json.dumps([{**o.to_dict(), "seconds": None} for o in run.outcomes])


def test_outcomes_come_in_the_order_of_the_files_whatever_the_number_of_workers(library: Path) -> None:
    one = verify_library(["lib"], jobs=2)
    assert [c.circuit for c in one.circuits] == ["d1", "d3", "d5", "d0", "d2", "d4"]
    assert words(one)[8:10] == [("d2", "states", "met"), ("d2", "half", "violated")]
    assert one.summary == {"violated": 1, "undecided": 0, "met": 11}
    with ThreadPoolExecutor(2) as threads:
        assert timeless(verify_library(["lib"], executor=threads)) == timeless(one)
    assert timeless(verify_library(["lib"], executor=Shuffled(), jobs=1)) == timeless(one)


@pytest.mark.parametrize(("attempts", "outcome"), [pytest.param(1, "met", marks=pytest.mark.slow), (2, "undecided")])
def test_a_worker_killed_by_a_circuit_costs_that_circuit_at_most(library: Path, attempts: int, outcome: str) -> None:
    with Deadly('circuit d3 ', attempts) as executor:
        run = verify_library(["lib"], executor=executor, jobs=2)
    good = [word for circuit, _, word in words(run) if circuit != "d3"]
    assert good.count("met") == 9 and good.count("violated") == 1
    assert [word for circuit, _, word in words(run) if circuit == "d3"] == [outcome] * 2
    assert executor.calls.count((True, 2)) == 1 and executor.calls[-1] == (True, 2)  # alone: after all others
    if outcome == "undecided":
        (blamed,) = [o for o in run.outcomes if (o.circuit, o.label) == ("d3", "half")]
        assert "was ended by SIGKILL" in blamed.note
        assert (blamed.file, blamed.line) == (os.path.join("lib", "b", "d3.loop"), 6)
        (trouble,) = [c.trouble for c in run.circuits if c.trouble]
        assert trouble.kind == "died"


def breaks(task: str, attempt: int) -> str:
    os._exit(3)


class Breaking(Executor):
    """The standard pool with a worker that dies at its first task: it is broken for good."""

    def __init__(self) -> None:
        self.pool = ProcessPoolExecutor(1, mp_context=get_context("spawn"))
        self.count = 0

    def submit(self, fn, /, *args, **kwargs) -> Future[str]:
        self.count += 1
        return self.pool.submit(breaks if self.count == 1 else fn, *args)


@pytest.mark.slow
def test_where_the_standard_pool_breaks_for_good_own_workers_take_over(library: Path) -> None:
    executor = Breaking()
    run = verify_library(["lib"], executor=executor, jobs=1)
    assert run.summary == {"violated": 1, "undecided": 0, "met": 11}
    assert executor.count <= 6 + 1
    assert verify_library(["lib/d0.loop"], executor=Breaking(), jobs=1).summary["met"] == 2


@pytest.mark.slow
def test_an_executor_that_was_shut_down_takes_nothing_and_costs_nothing(library: Path) -> None:
    threads = ThreadPoolExecutor(1)
    threads.shutdown()
    assert verify_library(["lib/d0.loop"], executor=threads).summary["met"] == 2


def test_a_file_that_cannot_be_read_is_told_and_the_rest_is_run(library: Path) -> None:
    (library / "broken.loop").write_text("circuit broken\nexpect states = = 1\n", encoding="utf-8")
    (library / "binary.loop").write_bytes(b"circuit \xff\xfe\n")
    (library / "kinds.loop").write_text("# parts\n\nkind k = resistor(resistance = 1 ohm)\n", encoding="utf-8")  # no circuit: left out
    (library / "slip.loop").write_text("cirucit slip\nexpect states = 1\n", encoding="utf-8")  # a slip: told
    with ThreadPoolExecutor(1) as threads:
        run = verify_library(["lib", "nowhere.loop"], executor=threads)
    assert len(run.mistakes) == 4
    assert len(run.outcomes) == 12


def test_trouble_of_one_circuit_stays_its_own(library: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from loopsim.requirements import verify as module

    real = module.verify

    def verify(circuit, **more):
        if circuit.name == "d1":
            raise ZeroDivisionError("inside")
        return real(circuit, **more)

    monkeypatch.setattr(module, "verify", verify)
    with ThreadPoolExecutor(1) as threads:
        run = verify_library(["lib"], executor=threads)
    first, *rest = run.circuits
    assert first.trouble is not None and first.trouble.kind == "internal" and "ZeroDivisionError" in first.trouble.detail
    assert {o.outcome for o in first.outcomes} == {"undecided"} and not any(c.trouble for c in rest)


def test_an_analysis_that_forgets_its_budget_is_stopped_in_the_worker(library: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from loopsim.requirements import judging
    from loopsim.requirements import verify as module

    real = module.verify

    def forgets(circuit, hear, **more):
        real(replace(circuit, requirements=circuit.requirements[:1]), hear=hear, **more)
        while True:
            pass

    monkeypatch.setattr(module, "verify", forgets)
    circuits, _ = read_library([str(library / "d0.loop")])
    monkeypatch.setattr(judging, "GRACE", 1.0)
    with ThreadPoolExecutor(1) as threads:
        (run,) = verify_circuits(circuits, options=Options(budget=0.05), executor=threads).circuits
    assert run.trouble is not None and run.trouble.kind == "overrun"
    assert [o.outcome for o in run.outcomes] == ["met", "undecided"]  # what was judged before stands
    assert "not finished within its budget of 0.05 s" in run.outcomes[1].note


def test_a_task_is_text_alone_and_needs_no_file(library: Path) -> None:
    (library / "parts").mkdir()
    (library / "parts" / "values.loop").write_text("kind lower_one = resistor(resistance = 1 kohm)\n", encoding="utf-8")
    text = circuit_text("uses").replace("let supply", 'use "parts/values.loop"\nlet supply').replace("lower: 1 kohm", "lower: lower_one")
    (library / "uses.loop").write_text(text, encoding="utf-8")
    (circuit,), _ = read_library([str(library / "uses.loop")])
    task = task_text(circuit, Options())
    for path in library.rglob("*.loop"):
        path.unlink()
    assert [o.outcome for o in read_record(judge(task)).outcomes] == ["met", "met"]


def test_a_worker_with_another_loopsim_decides_nothing(library: Path) -> None:
    (circuit,), _ = read_library([str(library / "d0.loop")])
    task = json.loads(task_text(circuit, Options()))
    record = read_record(judge(json.dumps({**task, "code": "0.0.1 abc"})))
    assert record.outcomes == () and record.trouble is not None and "another loopsim" in record.trouble.message


def test_an_interrupt_ends_with_what_is_finished(library: Path) -> None:
    def progress(share: float) -> None:
        if share > 0.4:
            raise KeyboardInterrupt

    with ThreadPoolExecutor(1) as threads:
        run = verify_library(["lib"], executor=threads, progress=progress)
    assert run.interrupted and len(run.circuits) == 3 and run.missing == 3


@pytest.mark.parametrize(
    ("patterns", "count"), [(["half"], 6), (["d1"], 2), (["d1::half"], 1), (["d?::st*", "d0"], 7), (["nothing"], 0)]
)
def test_patterns_choose_requirements(library: Path, patterns: list[str], count: int) -> None:
    with ThreadPoolExecutor(1) as threads:
        assert len(verify_library(["lib"], select=patterns, executor=threads).outcomes) == count


def test_files_are_found_once_in_a_stable_order(library: Path) -> None:
    (library / "parts").mkdir()
    (library / "parts" / "x.loop").write_text("circuit x\n", encoding="utf-8")
    (library / "notes.txt").write_text("circuit y\n", encoding="utf-8")
    os.symlink(library / "d0.loop", library / "z.loop")
    found = [name for name, _ in circuit_files(["lib/d4.loop", "lib", "lib/b", library])]
    assert found[:2] == ["lib/d4.loop", "lib/b/d1.loop"] and len(found) == 6


def test_every_field_of_an_outcome_survives_the_way_from_a_worker() -> None:
    from loopsim.requirements.judging import Record, record_text
    from loopsim.requirements.outcomes import RequirementOutcome

    whole = RequirementOutcome(
        "c", "l", "t", "met", (0.1, 1e-300, 1 / 3), ((None, 1.5), (2.0, None)), 5e-324, 0.25, "\u202e", "f", 3, "proved"
    )
    odd = replace(whole, measured=(float("inf"),), margin=float("inf"), outcome="violated")
    record = Record((whole, odd))
    assert read_record(record_text(record)) == record
    assert set(RANK) == {"met", "violated", "undecided"}
    for damage in ('{"outcomes": []}', '{"outcomes": [{}], "trouble": null}', "[]", "3", ""):
        with pytest.raises((ValueError, KeyError, TypeError)):
            read_record(damage)


@pytest.mark.slow
def test_the_shipped_library_gives_the_same_bytes_for_1_2_and_8_workers(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(Path(__file__).parents[2])
    runs = [timeless(verify_library(["circuits"], jobs=jobs)) for jobs in (1, 2, 8)]
    assert runs[0] == runs[1] == runs[2]
