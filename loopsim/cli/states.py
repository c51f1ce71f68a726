"""`loopsim states FILE`."""

from __future__ import annotations

from typing import TYPE_CHECKING

from loopsim.cli.answer import Answer, Surroundings
from loopsim.cli.exits import Exit
from loopsim.cli.options import Request
from loopsim.cli.reading import read_circuit, settings, write_file
from loopsim.output.csv import states_csv
from loopsim.output.document import document, document_text
from loopsim.output.text import states_text

if TYPE_CHECKING:
    from loopsim.analyses.results import States

DEFAULT_BOX = 1e3  # [V]
DEFAULT_BUDGET = 60.0  # [s]


def run(request: Request, around: Surroundings) -> Answer:
    """Every operating point of the file."""
    circuit = read_circuit(request.paths[0])
    from loopsim.analyses.states import states

    points = states(
        circuit,
        settings=settings(circuit, request.get("set", ())),
        box=request.get("box", DEFAULT_BOX),
        budget=request.get("budget", DEFAULT_BUDGET),
    )
    remarks = write_file(request.get("csv"), states_csv(points)) if request.has("csv") else ()
    if request.has("json"):
        whole = document(
            "states", points.to_dict(), circuit=points.circuit, file=request.paths[0], settings=points.settings
        )
        return Answer(document_text(whole), code(points), remarks)
    return Answer(states_text(points, around.answers), code(points), remarks)


def code(points: States) -> Exit:
    """Undecided where the list is not proved complete or a verdict is open."""
    decided = points.complete and all(state.stable is not None for state in points)
    return Exit.WELL if decided else Exit.UNDECIDED
