"""One circuit of a library run as plain text: the task that a worker is given, the record that it gives back.

Both are JSON texts, so that they mean the same in a process, in a thread, on another machine and in a journal.
A task carries the text of the circuit and of everything it uses, never a path to open.
"""

from __future__ import annotations

import json
import traceback
from collections.abc import Mapping
from dataclasses import asdict, dataclass, fields, replace
from typing import Any

from loopsim.circuit import Circuit
from loopsim.errors import CircuitError, InternalError, LoopsimError
from loopsim.requirements.fingerprint import code
from loopsim.requirements.outcomes import RequirementOutcome
from loopsim.requirements.wall import Overrun, last_resort, within_wall

GRACE = 5.0  # [s] past the budget before an analysis is stopped from outside: the budget is looked at between steps
LAST_RESORT = 30.0  # [s] past twice the budget before a worker process of our own ends itself


@dataclass(frozen=True)
class Options:
    """How a library is verified. budget: wall time for each circuit [s]; box: net voltages looked at, +/- [V];
    require_proof: a requirement is met only by what is proved."""

    budget: float = 60.0
    box: float = 1e3
    require_proof: bool = False


@dataclass(frozen=True)
class Trouble:
    """Why a circuit could not be judged. kind: mistake (in the file), analysis, overrun, died or internal;
    detail: for a bug report."""

    kind: str
    message: str
    detail: str = ""


@dataclass(frozen=True)
class Record:
    """What a worker found: an outcome for each requirement, or those that came before the trouble."""

    outcomes: tuple[RequirementOutcome, ...] = ()
    trouble: Trouble | None = None


def task_text(circuit: Circuit, options: Options, settings: Mapping[str, float] | None = None) -> str:
    """The task of judging the requirements that `circuit` holds. settings: let to value [SI], of which those
    that it has are set."""
    task = {
        "code": code(),
        "file": circuit.file,
        "sources": list(circuit.sources.items()),  # its own text first
        "labels": [requirement.label for requirement in circuit.requirements],
        "options": asdict(options),
        "settings": {let: value for let, value in (settings or {}).items() if let in circuit.parameters},
    }
    return json.dumps(task)


def judge(task: str, attempt: int = 1) -> str:
    """The record of a task, for any executor. attempt: so that one that runs equal calls only once runs a second attempt."""

    asked = json.loads(task)
    if asked["code"] != code():
        return record_text(Record(trouble=Trouble("analysis", f"its worker runs another loopsim ({code()[:20]}...)")))
    options = Options(**asked["options"])
    heard: list[RequirementOutcome] = []
    try:
        record = within_wall(options.budget + GRACE, lambda: _judged(asked, options, heard))
    except Overrun:  # what was judged before stands
        record = Record(tuple(heard), Trouble("overrun", f"not finished within its budget of {options.budget:g} s"))
    except CircuitError as error:
        record = Record(trouble=Trouble("mistake", str(error)))
    except Exception as error:  # whatever it is, it stays this circuit's
        if isinstance(error, LoopsimError) and not isinstance(error, InternalError):
            record = Record(trouble=Trouble("analysis", str(error)))
        else:
            record = Record(trouble=Trouble("internal", f"{type(error).__name__}: {error}", traceback.format_exc()))
    return record_text(record)


def judge_in_worker(task: str, attempt: int = 1) -> str:
    """`judge` in a process of our own, that may be ended when nothing else stops it."""
    budget = Options(**json.loads(task)["options"]).budget
    with last_resort(2.0 * budget + LAST_RESORT):
        return judge(task, attempt)


def _judged(asked: dict[str, Any], options: Options, heard: list[RequirementOutcome]) -> Record:
    from loopsim.language.load import parse
    from loopsim.requirements.verify import verify

    sources = dict(asked["sources"])
    text = asked["sources"][0][1]
    circuit = parse(text, file=asked["file"], sources=sources)
    wanted = set(asked["labels"])
    chosen = tuple(requirement for requirement in circuit.requirements if requirement.label in wanted)
    circuit = replace(circuit, requirements=chosen)
    found = verify(
        circuit, settings=asked["settings"], box=options.box, budget=options.budget, require_proof=options.require_proof, hear=heard.append
    )  # fmt: skip
    return Record(found)


def record_text(record: Record) -> str:
    """A record as one line; every float comes back to the bit."""
    return json.dumps(asdict(record), separators=(",", ":"))


def read_record(text: str) -> Record:
    """The record of a line; ValueError, KeyError or TypeError for anything else."""
    data = json.loads(text)
    known = {field.name for field in fields(RequirementOutcome)}
    outcomes = []
    for entry in data["outcomes"]:
        if set(entry) != known or entry["outcome"] not in ("met", "violated", "undecided"):
            raise ValueError("no outcome")
        outcomes.append(RequirementOutcome(**{name: _frozen(value) for name, value in entry.items()}))
    trouble = None if data["trouble"] is None else Trouble(**data["trouble"])
    return Record(tuple(outcomes), trouble)


def _frozen(value: Any) -> Any:
    return tuple(_frozen(item) for item in value) if isinstance(value, list) else value


def undecided(circuit: Circuit, note: str) -> tuple[RequirementOutcome, ...]:
    """Every requirement of a circuit as undecided for one reason."""
    return tuple(
        RequirementOutcome(
            circuit.name, r.label, r.text, "undecided", note=note,
            file=r.span.file if r.span else circuit.file, line=r.span.line if r.span else None,
        )
        for r in circuit.requirements
    )  # fmt: skip
