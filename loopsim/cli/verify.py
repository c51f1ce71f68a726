"""`loopsim verify PATH...`."""

from __future__ import annotations

import os
import signal
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from typing import Any

from loopsim.circuit import Circuit
from loopsim.cli.answer import Answer, Surroundings
from loopsim.cli.exits import Exit, highest_ranked
from loopsim.cli.faults import bug_report
from loopsim.cli.options import Request, UsageError, nearest
from loopsim.cli.progress import progress
from loopsim.cli.reading import read_circuit, settings, write_file
from loopsim.errors import CircuitError, LoopsimError
from loopsim.output.annotations import annotation_lines, no_order
from loopsim.output.document import document, document_text
from loopsim.output.junit import junit_text
from loopsim.output.text import counted
from loopsim.output.verify_text import (
    Units,
    baseline_section,
    listing_text,
    verify_csv,
    verify_markdown,
    verify_text,
)
from loopsim.printable import printable
from loopsim.requirements.baseline import (
    Entry,
    Moved,
    Place,
    baseline_text,
    compare,
    entries,
    read_baseline,
    seen_from,
    within_scope,
)
from loopsim.requirements.journal import DEFAULT_NAME, Journal, JournalError
from loopsim.requirements.judging import Options
from loopsim.requirements.library import LibraryRun, read_library, verify_circuits
from loopsim.requirements.outcomes import RequirementOutcome
from loopsim.requirements.selection import chosen

CODES = {"met": Exit.WELL, "violated": Exit.VIOLATED, "undecided": Exit.UNDECIDED}
TROUBLE_CODES = {"mistake": Exit.MISTAKE, "internal": Exit.INTERNAL}  # the others leave undecided requirements
DEFAULTS = Options()


def run(request: Request, around: Surroundings) -> Answer:
    """Every requirement of every circuit below the paths, worst first."""
    if request.has("json") and request.has("annotations"):
        raise UsageError("--json and --annotations both want standard output", "take one of them, or --junit FILE", "verify")
    stored = _stored_baseline(request)
    circuits, mistakes = read_library(request.paths, read_circuit)
    select = request.get("select", ())
    selected = [chosen(circuit, select) for circuit in circuits]
    if request.has("list"):
        return _listing(request, circuits, selected, mistakes)
    lets = _settings(request, circuits)
    with _journal(request, selected) as (journal, remarks), progress(around, "verify") as tell:
        found = _verified(request, selected, lets, journal, tell)
    if found.interrupted:
        signal.signal(signal.SIGINT, signal.SIG_DFL)  # the second one stops at once
    changes = _compared(request, stored, found, mistakes)
    codes = [CODES[outcome.outcome] for outcome in found.outcomes] or [Exit.NOTHING]
    codes += [TROUBLE_CODES.get(circuit.trouble.kind, Exit.UNDECIDED) for circuit in found.circuits if circuit.trouble]
    codes += [Exit.MISTAKE] * bool(mistakes) + [Exit.INTERRUPTED] * found.interrupted
    codes += [Exit.VIOLATED] * any(change.kind == "vanished" for change in changes or ())
    remarks += _remarks(request, found, mistakes, journal)
    if not any(circuit.requirements for circuit in selected) and not mistakes:
        remarks.append(_why_nothing(request, circuits))
    units = {(c.file, r.label): r.unit for c in selected for r in c.requirements}
    for written, code in _files(request, stored, found, mistakes, units):
        remarks.append(written)
        codes.append(code)
    return _answer(_text(request, around, found, mistakes, changes, units), codes, remarks)


def _answer(text: str, codes: Sequence[int], remarks: Sequence[str]) -> Answer:
    return Answer(text, highest_ranked(codes), tuple(no_order(remark) for remark in remarks))


def _settings(request: Request, circuits: Sequence[Circuit]) -> dict[str, float]:
    """The lets of `--set` [SI]; CircuitError for one that no circuit has, or that cannot have the value in one that has it."""
    found: dict[str, float] = {}
    for name, text in request.get("set", ()):
        having = [circuit for circuit in circuits if name in circuit.parameters]
        if circuits and not having:
            known = {let for circuit in circuits for let in circuit.parameters if "." not in let}
            hint = nearest(name, known) or f"their lets: {', '.join(sorted(known))}"
            raise CircuitError("unknown-let", f"no circuit has a let `{name}`", hint=hint)
        for circuit in having:
            found.update(settings(circuit, [(name, text)]))
    return found


def _verified(
    request: Request,
    circuits: Sequence[Circuit],
    lets: Mapping[str, float],
    journal: Journal | None,
    tell: Callable[[float], None] | None,
) -> LibraryRun:
    options = Options(
        request.get("budget", DEFAULTS.budget), request.get("box", DEFAULTS.box), require_proof=request.has("require_proof")
    )
    if not request.has("cluster"):
        return verify_circuits(
            circuits, options=options, settings=lets, jobs=request.get("jobs"), journal=journal, progress=tell
        )  # fmt: skip
    from loopsim.cli.cluster import cluster

    with cluster(request.get("cluster")) as (executor, threads):
        jobs = request.get("jobs", threads)
        return verify_circuits(
            circuits, options=options, settings=lets, jobs=jobs, executor=executor, journal=journal, progress=tell
        )  # fmt: skip


@contextmanager
def _journal(request: Request, circuits: Sequence[Circuit]) -> Iterator[tuple[Journal | None, list[str]]]:
    """The journal of the run and what to say of it. One circuit alone has nothing to go on from, and leaves no
    file unless it is named."""
    asked = request.get("journal")
    if asked is None and sum(bool(circuit.requirements) for circuit in circuits) < 2:
        yield None, []
        return
    path = asked or DEFAULT_NAME
    remarks = []
    try:
        journal = Journal.afresh(path) if request.has("fresh") else Journal.resume(path)
    except JournalError as error:
        if asked:
            raise
        yield None, [f"{printable(str(error))}; this run keeps none"]
        return
    if journal.damaged:
        remarks.append(f"{printable(path)}: {journal.damaged} damaged line{'s' * (journal.damaged > 1)} ignored")
    try:
        yield journal, remarks
    finally:
        journal.close()


def _remarks(request: Request, found: LibraryRun, mistakes: Sequence[CircuitError], journal: Journal | None) -> list[str]:
    """What belongs beside the answer: broken files, circuits in trouble, what the journal gave."""
    remarks = [str(mistake) for mistake in mistakes]
    for circuit in found.circuits:
        if circuit.trouble is None:
            continue
        if circuit.trouble.kind == "internal":
            remarks.append(bug_report(f"{circuit.file}: {circuit.trouble.message}", circuit.trouble.detail, ("verify", *request.paths)))
        elif circuit.trouble.kind == "mistake":
            remarks.append(circuit.trouble.message)
        else:
            remarks.append(printable(f"{circuit.file}: {circuit.trouble.message}"))
    if journal and found.remembered:
        whole = len(found.circuits) + found.missing
        remarks.append(
            f"{found.remembered} of {counted(whole, 'circuit')} as the journal {printable(journal.path)} has it; --fresh judges anew"
        )
    if found.journal_trouble:
        remarks.append(printable(found.journal_trouble))
    if found.interrupted:
        kept = f"; the journal {printable(journal.path)} keeps them: the same command goes on from there" if journal else ""
        remarks.append(f"interrupted: {counted(len(found.circuits), 'circuit')} judged, {found.missing} not{kept}")
    return remarks


def _text(
    request: Request,
    around: Surroundings,
    found: LibraryRun,
    mistakes: Sequence[CircuitError],
    changes: Sequence[Moved] | None,
    units: Units,
) -> str:
    if request.has("json"):
        body = {
            "requirements": [_entry(outcome, request.has("timings")) for outcome in found.outcomes],
            "summary": found.summary,
            "mistakes": _mistake_entries(mistakes),
            "interrupted": found.interrupted,
            "changes": None if changes is None else [change.to_dict() for change in changes],
        }
        return _document(request, body)
    text = verify_text(found.outcomes, units, around.answers)
    lines = annotation_lines(found.outcomes, mistakes) if request.has("annotations") else ""
    if changes is not None:
        text += baseline_section(changes, request.get("baseline"))
    return text + lines


def _document(request: Request, body: dict[str, Any]) -> str:
    given = dict(request.get("set", ()))
    return document_text(document("verify", body, circuit="", file=", ".join(request.paths), settings=given))


def _entry(outcome: RequirementOutcome, timings: bool) -> dict[str, Any]:
    """Wall times differ between runs: they are given only where they are asked for, so that equal runs are
    equal documents."""
    seconds = outcome.seconds if timings else None
    return {**outcome.to_dict(), "seconds": seconds, "file": outcome.file, "line": outcome.line}


def _mistake_entries(mistakes: Sequence[CircuitError]) -> list[dict[str, Any]]:
    return [
        {"file": m.file, "line": m.line, "column": m.column, "code": m.code, "message": m.message, "hint": m.hint} for m in mistakes
    ]


def _files(
    request: Request,
    stored: dict[Place, Entry] | None,
    found: LibraryRun,
    mistakes: Sequence[CircuitError],
    units: Units,
) -> Iterator[tuple[str, Exit]]:
    """Write what was asked for; (remark, code) of each. One that cannot be written costs neither the others
    nor the answer."""
    makers: dict[str, Callable[[], str]] = {
        "junit": lambda: junit_text(found.outcomes, mistakes, timings=request.has("timings")),
        "csv": lambda: verify_csv(found.outcomes),
        "summary": lambda: verify_markdown(found.outcomes, units),
    }
    if request.has("accept") and found.outcomes and not (found.interrupted or mistakes):
        path = request.get("baseline")
        makers["baseline"] = lambda: baseline_text(_renewed(request, stored or {}, found, path))
    elif request.has("accept"):
        yield "not accepted: the run is not whole", Exit.WELL
    for key, make in makers.items():
        if request.has(key):
            try:
                yield write_file(request.get(key), make())[0], Exit.WELL
            except LoopsimError as error:
                yield printable(str(error)), Exit.MISTAKE


def _stored_baseline(request: Request) -> dict[Place, Entry] | None:
    """The baseline, read before anything is computed; None where there is none yet and the run shall make it."""
    if not request.has("baseline"):
        if request.has("accept"):
            raise UsageError("--accept needs the baseline that it renews", "--baseline FILE --accept", "verify")
        return None
    path = request.get("baseline")
    if request.has("accept") and not os.path.exists(path):
        return None
    return read_baseline(path)


def _compared(
    request: Request, stored: dict[Place, Entry] | None, found: LibraryRun, mistakes: Sequence[CircuitError]
) -> tuple[Moved, ...] | None:
    """What differs from the baseline; None where there is none yet."""
    if stored is None:
        return None
    path = request.get("baseline")
    met = {(seen_from(path, outcome.file or ""), outcome.label) for outcome in found.outcomes}
    unread = {seen_from(path, mistake.file) for mistake in mistakes if mistake.file}
    expected = [] if found.interrupted else within_scope(stored, path, request.paths, request.get("select", ()))
    vanished = [place for place in expected if place not in met and place[0] not in unread]
    return compare(stored, found.outcomes, path, vanished)


def _renewed(request: Request, stored: dict[Place, Entry], found: LibraryRun, path: str) -> dict[Place, Entry]:
    """The stored entries that this run did not look at, and what it found."""
    scope = set(within_scope(stored, path, request.paths, request.get("select", ())))
    return {**{place: entry for place, entry in stored.items() if place not in scope}, **entries(found.outcomes, path)}


def _listing(
    request: Request, circuits: Sequence[Circuit], selected: Sequence[Circuit], mistakes: Sequence[CircuitError]
) -> Answer:
    """The requirements by name, nothing judged."""
    rows = [(c.file or "", r.span.line if r.span else None, c.name, r.label, r.text) for c in selected for r in c.requirements]
    codes = [Exit.MISTAKE] * bool(mistakes) + [Exit.NOTHING] * (not rows)
    remarks = [str(mistake) for mistake in mistakes]
    if not rows:
        remarks.append(_why_nothing(request, circuits))
    if request.has("json"):
        names = ("file", "line", "circuit", "label", "text")
        body = {"listed": [dict(zip(names, row, strict=True)) for row in rows], "mistakes": _mistake_entries(mistakes)}
        return _answer(_document(request, body), codes, remarks)
    return _answer(listing_text(rows), codes, remarks)


def _why_nothing(request: Request, circuits: Sequence[Circuit]) -> str:
    where = printable(", ".join(request.paths))
    if not circuits:
        return f"no circuit below {where}"
    labels = {r.label for circuit in circuits for r in circuit.requirements} | {circuit.name for circuit in circuits}
    if not any(circuit.requirements for circuit in circuits):
        return f"no `expect` in the circuits below {where}"
    patterns = request.get("select", ())
    hint = nearest(patterns[0], labels) or "--list shows their names"
    return printable(f"--select {' '.join(patterns)} names no requirement below {where}: {hint}")
