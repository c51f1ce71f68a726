"""`loopsim verify PATH...`."""

from __future__ import annotations

import os
from collections.abc import Sequence

from loopsim.cli.answer import Answer, Surroundings
from loopsim.cli.exits import Exit, highest_ranked
from loopsim.cli.faults import explain
from loopsim.cli.options import Request
from loopsim.cli.reading import read_circuit, write_file
from loopsim.errors import CircuitError
from loopsim.output.document import document, document_text
from loopsim.output.junit import junit_text
from loopsim.printable import printable
from loopsim.requirements.outcomes import RANK, RequirementOutcome
from loopsim.requirements.verify import verify

CODES = {"met": Exit.WELL, "violated": Exit.VIOLATED, "undecided": Exit.UNDECIDED}
DEFAULT_BUDGET = 60.0  # [s] for each circuit


def run(request: Request, around: Surroundings) -> Answer:
    """Every requirement of every circuit below the paths, worst first."""
    outcomes: list[RequirementOutcome] = []
    remarks: list[str] = []
    codes: list[int] = []
    for path in circuit_files(request.paths):
        try:
            circuit = read_circuit(path)
            budget = request.get("budget", DEFAULT_BUDGET)
            outcomes += verify(circuit, box=request.get("box", 1e3), budget=budget)
        except CircuitError as error:
            message, code = explain(error, ())
            remarks.append(message)
            codes.append(code)
    codes += [CODES[o.outcome] for o in outcomes] or [Exit.NOTHING]
    if request.has("junit"):
        remarks += write_file(request.get("junit"), junit_text(outcomes))
    if request.has("json"):
        summary = {word: sum(o.outcome == word for o in outcomes) for word in RANK}
        body = {"requirements": [o.to_dict() for o in outcomes], "summary": summary}
        text = document_text(document("verify", body, circuit="", file=", ".join(request.paths), settings={}))
    else:
        text = verify_text(outcomes)
    return Answer(text, highest_ranked(codes), tuple(remarks))


def circuit_files(paths: Sequence[str]) -> list[str]:
    """Every circuit file of the paths, sorted within a folder; folders named `parts` hold none of their own."""
    found: list[str] = []
    for path in paths:
        if not os.path.isdir(path):
            found.append(path)
            continue
        below: list[str] = []
        for folder, folders, names in os.walk(path):
            folders[:] = sorted(f for f in folders if f != "parts" and not f.startswith("."))
            below += [os.path.join(folder, name) for name in names if name.endswith(".loop")]
        found += sorted(below)
    return list(dict.fromkeys(found))


def verify_text(outcomes: Sequence[RequirementOutcome]) -> str:
    """A line each, violated before undecided before met, smallest margin first; then the count of each."""
    order = sorted(outcomes, key=lambda o: (RANK[o.outcome], float("inf") if o.margin is None else o.margin))
    lines = []
    for o in order:
        measured = ", ".join(f"{value:.6g}" for value in o.measured)
        more = "".join((f"  measured {measured}" if measured else "", f"  ({o.note})" if o.note else ""))
        lines.append(printable(f"{o.outcome:<9}  {o.circuit}  {o.text}{more}"))
    counts = ", ".join(f"{sum(o.outcome == word for o in outcomes)} {word}" for word in ("met", "violated", "undecided"))
    return "\n".join([*lines, "", counts, ""])
