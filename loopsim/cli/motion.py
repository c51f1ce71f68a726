"""`loopsim transient FILE --for TIME` and `loopsim cycle FILE`."""

from __future__ import annotations

from typing import Any

from loopsim.cli.answer import Answer, Surroundings
from loopsim.cli.exits import Exit
from loopsim.cli.options import Request, UsageError
from loopsim.cli.progress import progress, teller
from loopsim.cli.reading import read_circuit, settings, write_file
from loopsim.errors import AnalysisError
from loopsim.output.document import document, document_text
from loopsim.printable import printable, printable_lines

NOTHING = ("no-cycle",)  # the answer to a question that was understood: there is none


def run_transient(request: Request, around: Surroundings) -> Answer:
    """Response in time. A run that stopped early is printed as far as it came, with exit code 3, or 130 where it was interrupted."""
    if not request.has("for"):
        raise UsageError("transient needs a time: --for TIME", "for example --for 20ms", "transient")
    circuit = read_circuit(request.paths[0])
    from loopsim.analyses.transient import TransientError, TransientInterrupted, transient

    given = _given(request, {word: word for word in ("start", "nudge", "watch", "tolerance", "ramp")})
    code = Exit.WELL
    with progress(around, "transient") as share:
        try:
            lets = settings(circuit, request.get("set", ()))
            run = transient(circuit, request.get("for"), settings=lets, progress=share, tell=teller(around), **given)
            trouble: tuple[str, ...] = ()
        except TransientInterrupted as interrupted:
            run, trouble, code = interrupted.partial, (printable(str(interrupted)),), Exit.INTERRUPTED
        except TransientError as stopped:
            if stopped.partial is None:
                raise
            run, trouble, code = stopped.partial, (printable(str(stopped)),), Exit.UNDECIDED
    from loopsim.output.time_text import transient_csv, transient_text

    remarks = trouble
    if request.has("csv"):
        remarks += write_file(request.get("csv"), transient_csv(run))
    if request.has("plot"):
        run.plot(request.get("plot"))
        remarks += (f"wrote {printable(request.get('plot'))}",)
    return _answer(request, run, "transient", transient_text(run), code, remarks)


def run_cycle(request: Request, around: Surroundings) -> Answer:
    """Sustained oscillation, or the word that there is none from this start."""
    circuit = read_circuit(request.paths[0])
    from loopsim.analyses.cycle import cycle

    words = {word: word for word in ("start", "nudge", "watch", "tolerance", "budget")} | {"for": "duration"}
    lets = settings(circuit, request.get("set", ()))
    with progress(around, "cycle") as share:
        try:
            found = cycle(circuit, settings=lets, progress=share, tell=teller(around), **_given(request, words))
        except AnalysisError as answer:
            if answer.code not in NOTHING:
                raise
            return _none(request, circuit.name, answer)
    from loopsim.output.time_text import cycle_csv, cycle_text

    remarks: tuple[str, ...] = ()
    if request.has("csv"):
        remarks += write_file(request.get("csv"), cycle_csv(found))
    if request.has("plot"):
        found.plot(request.get("plot"))
        remarks += (f"wrote {printable(request.get('plot'))}",)
    code = Exit.UNDECIDED if found.stable is None else Exit.WELL
    return _answer(request, found, "cycle", cycle_text(found), code, remarks)


def _given(request: Request, words: dict[str, str]) -> dict[str, Any]:
    return {argument: request.get(option) for option, argument in words.items() if request.has(option)}


def _answer(request: Request, result: Any, verb: str, text: str, code: Exit, remarks: tuple[str, ...]) -> Answer:
    if request.has("json"):
        frame = {"circuit": result.circuit, "file": request.paths[0], "settings": result.settings}
        return Answer(document_text(document(verb, result.to_dict(), **frame)), code, remarks)
    return Answer(printable_lines(text) + "\n", code, remarks)


def _none(request: Request, circuit: str, answer: AnalysisError) -> Answer:
    if request.has("json"):
        empty: dict[str, Any] = dict.fromkeys(("start", "period", "frequency", "stable", "shift_error"))
        empty |= {"verdict": "no cycle", "multipliers": [], "exact": False, "swing": {}, "duty": {}, "times": [], "nets": {}}
        whole = document("cycle", {**empty, "notes": [answer.message]}, circuit=circuit, file=request.paths[0])
        return Answer(document_text(whole))
    return Answer(f"no cycle: {printable(answer.message)}\n")
