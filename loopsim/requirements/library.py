"""Many circuits: find them, judge each in a worker, gather the outcomes in an order that does not depend on
who finished first."""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Callable, Generator, Iterator, Mapping, Sequence
from concurrent.futures import FIRST_COMPLETED, Executor, Future, wait
from contextlib import closing
from dataclasses import dataclass, replace
from typing import Any

from loopsim.circuit import Circuit
from loopsim.errors import CircuitError
from loopsim.language.load import load
from loopsim.requirements.journal import Journal, JournalError, key_of
from loopsim.requirements.judging import (
    Options,
    Record,
    Trouble,
    judge,
    judge_in_worker,
    read_record,
    record_text,
    task_text,
    undecided,
)
from loopsim.requirements.outcomes import RANK, RequirementOutcome
from loopsim.requirements.selection import chosen
from loopsim.requirements.workers import WorkerPool

WINDOW = 3  # tasks handed out for each worker: enough that none waits, few enough that an interrupt leaves little behind
PARTS = "parts"  # a folder of this name holds definitions, no circuits
DEFINITIONS = ("use", "kind", "curve", "block")

DEFAULTS = Options()


@dataclass(frozen=True)
class CircuitRun:
    """One circuit of a library run. file: as found; outcomes: in the order of its `expect` lines; trouble: why
    it could not be judged, or None."""

    file: str
    circuit: str
    outcomes: tuple[RequirementOutcome, ...]
    trouble: Trouble | None = None


@dataclass(frozen=True)
class LibraryRun:
    """What became of a library.

    circuits: those with requirements, in the order of the files; mistakes: files that could not be read;
    remembered: how many circuits came from the journal; interrupted: stopped by the user, so that `circuits`
    holds only those that were finished; missing: how many are not in it for that; journal_trouble: why the
    journal could not be kept up, or empty.
    """

    circuits: tuple[CircuitRun, ...] = ()
    mistakes: tuple[CircuitError, ...] = ()
    remembered: int = 0
    interrupted: bool = False
    missing: int = 0
    journal_trouble: str = ""

    @property
    def outcomes(self) -> tuple[RequirementOutcome, ...]:
        """Every outcome, circuit by circuit."""
        return tuple(outcome for circuit in self.circuits for outcome in circuit.outcomes)

    @property
    def summary(self) -> dict[str, int]:
        """How many requirements are violated, undecided, met."""
        return {word: sum(outcome.outcome == word for outcome in self.outcomes) for word in RANK}

    def __repr__(self) -> str:
        counts = ", ".join(f"{number} {word}" for word, number in self.summary.items())
        many = "s" * (len(self.circuits) != 1)
        return f"LibraryRun({len(self.circuits)} circuit{many}, {counts})"

    def __str__(self) -> str:
        from loopsim.output.verify_text import verify_text

        return verify_text(self.outcomes)

    def _repr_html_(self) -> str:
        from loopsim.output.verify_text import verify_html

        return verify_html(self.outcomes)

    def to_dict(self) -> dict[str, Any]:
        """The JSON form."""
        return {"requirements": [outcome.to_dict() for outcome in self.outcomes], "summary": self.summary}

    def to_dataframe(self) -> Any:
        """A pandas data frame, one row a requirement; LoopsimError where pandas is not installed."""
        from loopsim.output.frames import requirements_frame

        return requirements_frame(self.outcomes)


def verify_library(
    paths: Sequence[str | os.PathLike[str]],
    *,
    select: Sequence[str] = (),
    options: Options = DEFAULTS,
    settings: Mapping[str, float] | None = None,
    jobs: int | None = None,
    executor: Executor | None = None,
    journal: Journal | None = None,
    progress: Callable[[float], None] | None = None,
) -> LibraryRun:
    """Judge every requirement of every circuit below `paths`; a file that cannot be read does not stop the others.

    select: patterns as for `chosen`, all requirements without one; the rest as for `verify_circuits`.
    """
    circuits, mistakes = read_library(paths)
    selected = [chosen(circuit, select) for circuit in circuits]
    found = verify_circuits(
        selected, options=options, settings=settings, jobs=jobs, executor=executor, journal=journal, progress=progress
    )  # fmt: skip
    return replace(found, mistakes=tuple(mistakes))


def verify_circuits(
    circuits: Sequence[Circuit],
    *,
    options: Options = DEFAULTS,
    settings: Mapping[str, float] | None = None,
    jobs: int | None = None,
    executor: Executor | None = None,
    journal: Journal | None = None,
    progress: Callable[[float], None] | None = None,
) -> LibraryRun:
    """Judge every requirement of the circuits, which came from text; those without any are left out.

    settings: let to value [SI], for every circuit that has it; jobs: workers (one a core); executor: any
    `concurrent.futures.Executor`, of which only `submit` and the order of completion are used and that is
    handed three tasks for each of `jobs`, own worker processes by default; journal: finished circuits are
    taken from it and put into it; progress: hears the share done (0 ..
    1). A circuit that cannot be judged does not stop the others; its requirements are undecided.
    An interrupt from the keyboard ends with what is finished.
    """
    asked = [circuit for circuit in circuits if circuit.requirements]
    tasks = [task_text(circuit, options, settings) for circuit in asked]
    keys = [key_of(task) if journal else "" for task in tasks]
    records: dict[int, Record] = {}
    if journal:
        records = {number: read_record(journal.known[key]) for number, key in enumerate(keys) if key in journal.known}
    remembered, interrupted = len(records), False
    to_do = [number for number in range(len(tasks)) if number not in records]
    trouble = ""
    try:
        with closing(_judged(tasks, to_do, jobs or cores(), executor)) as judged:
            for number, record in judged:
                records[number] = record
                if journal and not trouble:
                    trouble = _put(journal, keys[number], record)
                if progress:
                    progress(len(records) / len(tasks))
        if journal and not trouble:
            trouble = _put(journal)
    except KeyboardInterrupt:
        interrupted = True
    runs = tuple(_run(asked[number], records[number]) for number in sorted(records))
    return LibraryRun(runs, (), remembered, interrupted, len(tasks) - len(records), trouble)


def _put(journal: Journal, key: str = "", record: Record | None = None) -> str:
    """Put down a record, or that the run is finished; what went wrong. A full disk costs the journal, not the run."""
    try:
        if record is None:
            journal.finish()
        else:
            journal.add(key, record_text(record))
    except JournalError as error:
        return str(error)
    return ""


def cores() -> int:
    """Cores that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def _run(circuit: Circuit, record: Record) -> CircuitRun:
    known = {outcome.label: outcome for outcome in record.outcomes}
    note, _, _ = (record.trouble.message if record.trouble else "no outcome came back").partition("\n")
    missing = {outcome.label: outcome for outcome in undecided(circuit, note)}
    outcomes = tuple(known.get(requirement.label, missing[requirement.label]) for requirement in circuit.requirements)
    return CircuitRun(circuit.file or "", circuit.name, outcomes, record.trouble)


def _judged(
    tasks: Sequence[str], numbers: Sequence[int], jobs: int, executor: Executor | None
) -> Generator[tuple[int, Record]]:
    """(number, record) of each task as it is finished. A task whose worker was lost is tried once more, alone;
    then it bears the blame."""
    if not numbers:
        return
    own = None if executor else WorkerPool(min(jobs, len(numbers)))
    lost: list[int] = []
    try:
        refused = yield from _first_attempts(executor or own, tasks, numbers, jobs, lost)
        if refused:  # the executor broke for good: what it never took, and what it lost, our own workers do
            own = own or WorkerPool(min(jobs, len(refused)))
            executor = None
            yield from _first_attempts(own, tasks, refused, jobs, lost)
        for number in sorted(lost):
            ((_, answer),) = _finished(executor or own, tasks, [number], 1, 2)
            if isinstance(answer, Refused):
                own, executor = own or WorkerPool(1), None
                ((_, answer),) = _finished(own, tasks, [number], 1, 2)
            yield number, answer if isinstance(answer, Record) else _blamed(answer)
    finally:
        if own:
            own.stop()


def _first_attempts(
    pool: Executor | None, tasks: Sequence[str], numbers: Sequence[int], jobs: int, lost: list[int]
) -> Generator[tuple[int, Record], None, list[int]]:
    """(number, record) of what is answered. Appends to `lost` what the executor took and did not answer;
    returns what it refused."""
    refused: list[int] = []
    for number, answer in _finished(pool, tasks, numbers, WINDOW * jobs, 1):
        if isinstance(answer, Record):
            yield number, answer
        elif isinstance(answer, Refused):
            refused.append(number)
        else:
            lost.append(number)
    return refused


def _blamed(error: BaseException) -> Record:
    words = str(error) or type(error).__name__
    return Record(trouble=Trouble("died", f"no answer, tried twice, the second time alone: {words}"))


class Refused(Exception):
    """An executor that took no task: it is broken, or was shut down."""


def _finished(
    pool: Executor | None, tasks: Sequence[str], numbers: Sequence[int], window: int, attempt: int
) -> Iterator[tuple[int, Record | Exception]]:
    """(number, record or what came instead) in the order of completion, with at most `window` tasks handed out."""
    assert pool is not None
    function = judge_in_worker if isinstance(pool, WorkerPool) else judge
    waiting = deque(numbers)
    running: dict[Future[str], int] = {}
    try:
        while waiting or running:
            while waiting and len(running) < window:
                number = waiting.popleft()
                try:
                    running[pool.submit(function, tasks[number], attempt)] = number
                except Exception as error:
                    yield number, Refused(str(error))
            if not running:
                continue
            done, _ = wait(running, return_when=FIRST_COMPLETED)
            for future in done:
                number = running.pop(future)
                try:
                    answer: Record | Exception = read_record(future.result())
                except Exception as error:  # the worker died, or the executor lost the task
                    answer = error
                yield number, answer
    finally:
        for future in running:
            future.cancel()


def read_library(
    paths: Sequence[str | os.PathLike[str]], read: Callable[[str], Circuit] = load
) -> tuple[list[Circuit], list[CircuitError]]:
    """The circuits below the paths in a stable order, and what is wrong with the files that hold none. read:
    path to circuit."""
    circuits: list[Circuit] = []
    mistakes: list[CircuitError] = []
    for path, named in circuit_files(paths):
        try:
            if named or _meant_as_circuit(path):
                circuits.append(read(path))
        except CircuitError as error:
            mistakes.append(error)
    return circuits, mistakes


def _meant_as_circuit(path: str) -> bool:
    """Whether a file found in a folder is meant as a circuit. Only one that begins with definitions and has
    neither a circuit nor a requirement is none; whatever else cannot be read is told, so that no requirement
    gets lost by a slip in its file."""
    try:
        with open(path, encoding="utf-8") as stream:
            text = stream.read()
    except (OSError, ValueError):
        return True
    words = [line.split(maxsplit=1)[0] for line in text.splitlines() if line.strip() and not line.lstrip().startswith("#")]
    return not words or words[0] not in DEFINITIONS or "circuit" in words or "expect" in words


def circuit_files(paths: Sequence[str | os.PathLike[str]]) -> list[tuple[str, bool]]:
    """(path, whether it was named itself) of every circuit file, once each: paths as given, folders in the
    order of their names."""
    found: dict[str, tuple[str, bool]] = {}
    for given in paths:
        path = os.fspath(given)
        for name in _below(path) if os.path.isdir(path) else [path]:
            found.setdefault(os.path.realpath(name), (name, name == path))
    return list(found.values())


def _below(folder: str) -> list[str]:
    names: list[str] = []
    for place, folders, files in os.walk(folder):
        folders[:] = [name for name in folders if name != PARTS and not name.startswith(".")]
        names += [os.path.join(place, name) for name in files if name.endswith(".loop")]
    return sorted(names, key=lambda name: name.split(os.sep))
