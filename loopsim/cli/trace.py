"""`loopsim trace FILE --along LET`."""

from __future__ import annotations

import os
from importlib.util import find_spec
from typing import TYPE_CHECKING

from loopsim.cli.answer import Answer, Surroundings
from loopsim.cli.exits import Exit
from loopsim.cli.options import Request, UsageError, nearest
from loopsim.cli.reading import let_value, read_circuit, settings, unknown_let, write_file
from loopsim.errors import CircuitError, MissingExtra
from loopsim.output.document import document, document_text
from loopsim.output.overlay import distance, overlay_text, read_overlay
from loopsim.output.text import settings_text
from loopsim.output.trace_text import trace_csv, trace_text
from loopsim.printable import printable

if TYPE_CHECKING:
    from loopsim.analyses.trace import Trace
    from loopsim.circuit import Circuit
    from loopsim.output.overlay import Overlay

DEFAULT_BOX = 1e3  # [V]
DEFAULT_BUDGET = 60.0  # [s]
DEFAULT_RANGE_BUDGET = 10.0  # [s]


def run(request: Request, around: Surroundings) -> Answer:
    """The characteristic of the file along one let."""
    if not request.has("along"):
        raise UsageError("trace needs a let to move: --along LET", "for example --along level", "trace")
    circuit = read_circuit(request.paths[0])
    along = request.get("along")
    if along not in circuit.parameters:
        raise unknown_let(circuit, along)
    chosen = settings(circuit, request.get("set", ()))
    if along in chosen:
        raise UsageError(f"`{along}` is traced, so --set cannot hold it", "give the range with --over LO..HI", "trace")
    for net in (*request.get("watch", ()), *((request.get("versus"),) if request.has("versus") else ())):
        _known_net(circuit, net)
    if request.has("versus") and not request.has("plot"):
        raise UsageError("--versus says how to draw", "add --plot FILE", "trace")
    if request.has("plot") and find_spec("matplotlib") is None:
        raise MissingExtra("plot", "a plot")  # before the work, not after it
    for option in ("plot", "csv"):
        _writable(request, option)
    from loopsim.analyses.states import watched
    from loopsim.analyses.trace import STATIONS, trace

    watch = request.get("watch", watched(circuit))
    measured = None
    if request.has("overlay"):
        measured = read_overlay(request.get("overlay"), circuit.parameters[along].unit, circuit.nets, watch[0], along)

    curve = trace(
        circuit,
        along,
        over=_range(circuit, along, request),
        watch=watch,
        stations=request.get("stations", STATIONS),
        box=request.get("box", DEFAULT_BOX),
        budget=request.get("budget", DEFAULT_BUDGET),
        range_budget=request.get("range_budget", DEFAULT_RANGE_BUDGET),
        settings=chosen,
    )
    remarks = write_file(request.get("csv"), trace_csv(curve)) if request.has("csv") else ()
    if request.has("plot"):
        remarks += _draw(curve, request.get("plot"), request.get("versus", None), measured)
    if request.has("json"):
        payload = {**curve.to_dict(), "overlay": distance(curve, measured) if measured is not None else None}
        whole = document("trace", payload, circuit=curve.circuit, file=request.paths[0], settings=curve.settings)
        return Answer(document_text(whole), code(curve), remarks)
    units = {name: parameter.unit for name, parameter in circuit.parameters.items()}
    text = trace_text(curve, around.answers, settings_text(chosen, units))
    if measured is not None:
        text += f"\n{overlay_text(curve, measured)}\n"
    return Answer(text, code(curve), remarks)


def _draw(curve: Trace, path: str, versus: str | None, measured: Overlay | None) -> tuple[str, ...]:
    """Draw it and tell what the picture does not show. A picture that fails takes no answer with it that can still be printed."""
    from loopsim.output.plots_trace import PANELS

    if not curve.branches:
        return (f"{printable(path)} is not written: no branch was traced",)
    curve.plot(path, versus=versus, overlay=measured)
    remarks = [f"wrote {printable(path)}"]
    if len(curve.watch) > PANELS:
        remarks.append(f"drawn: the first {PANELS} of {len(curve.watch)} nets; --watch NET,... chooses")
    if versus is not None and measured is not None:
        remarks.append("measured points belong to a value of the let: drawn without --versus only")
    return tuple(remarks)


def _range(circuit: Circuit, along: str, request: Request) -> tuple[float, float] | None:
    """What --over says, in the unit of the let [SI; degC for a temperature]."""
    if not request.has("over"):
        return None
    low, high = (let_value(text, circuit.parameters[along], "--over ") for text in request.get("over"))
    if not low < high:
        said = "..".join(request.get("over"))
        raise UsageError(f"--over {printable(said)}: the range has to rise", "the lower value stands first: --over LO..HI", "trace")
    return low, high


def _writable(request: Request, option: str) -> None:
    """A folder that is not there is told before the work, not after it."""
    folder = os.path.dirname(request.get(option, ""))
    if folder and not os.path.isdir(folder):
        raise UsageError(f"--{option} {printable(request.get(option))}: there is no folder `{printable(folder)}`", "make it first", "trace")


def _known_net(circuit: Circuit, net: str) -> None:
    if net not in circuit.nets:
        hint = nearest(net, circuit.nets) or f"its nets: {', '.join(circuit.nets)}"
        raise CircuitError("unknown-net", f"{circuit.name} has no net `{net}`", hint=hint)


def code(curve: Trace) -> Exit:
    """Undecided where the states at some station are not proved complete, or lie on no branch."""
    return Exit.WELL if curve.complete else Exit.UNDECIDED
