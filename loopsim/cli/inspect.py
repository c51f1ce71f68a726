"""`loopsim inspect FILE`."""

from __future__ import annotations

from typing import TYPE_CHECKING

from loopsim.cli.answer import Answer, Surroundings
from loopsim.cli.exits import Exit
from loopsim.cli.options import Request
from loopsim.cli.reading import read_circuit, settings
from loopsim.output.document import document, document_text
from loopsim.output.inspection import inspection_data, inspection_text

if TYPE_CHECKING:
    from loopsim.circuit import Circuit


def run(request: Request, around: Surroundings) -> Answer:
    """What loopsim made of the file; exit code 2 where the structure allows no operating point."""
    circuit = read_circuit(request.paths[0])
    from loopsim.equations.assemble import parameter_values
    from loopsim.equations.structure import findings

    lets = settings(circuit, request.get("set", ()))
    values = {name: float(value) for name, value in parameter_values(circuit, lets).items()}
    found = findings(circuit)
    fatal = any(one.fatal for one in found)
    unknowns = () if fatal else _unknowns(circuit)
    code = Exit.MISTAKE if fatal else Exit.WELL
    if request.has("json"):
        data = inspection_data(circuit, unknowns, found)
        named = {name: value for name, value in values.items() if "." not in name}
        whole = document("inspect", data, circuit=circuit.name, file=request.paths[0], settings=named)
        return Answer(document_text(whole), code)
    return Answer(inspection_text(circuit, values, unknowns, found, around.answers), code)


def _unknowns(circuit: Circuit) -> tuple[tuple[str, str], ...]:
    from loopsim.equations.assemble import assemble

    return assemble(circuit).unknowns
