"""What is wrong with a circuit whatever its values: floating nets, loops of voltage sources, cuts of current sources, loose ends.

The graph has the nets (and the inner nodes of parts) as nodes; its edges say how parts join them at DC (`Branch.way`). Facts
of network theory (from memory): node voltages are determined only where conductances or prescribed voltages reach gnd;
currents are determined only where prescribed voltages form no loop.
"""

from __future__ import annotations

from collections import Counter, defaultdict
from collections.abc import Iterable, Mapping, Sequence, Set
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from typing import cast

import networkx as nx
import scipy.sparse
from scipy.sparse.csgraph import maximum_bipartite_matching

from loopsim.circuit import Circuit, Part
from loopsim.devices.contribution import Contribution
from loopsim.equations.parts import Key, part_contribution, resolve
from loopsim.equations.plan import plan
from loopsim.equations.sparse import assemble_sparse
from loopsim.errors import CircuitError, Span
from loopsim.language.rules import with_way_out

GROUND: Key = ("net", "gnd")
SHOWN = 6  # names in one message
ROUNDING = (
    1e-12  # of the sum of magnitudes within one part: body and gate of a transistor cancel to a few 1e-16
)


@dataclass(frozen=True, slots=True)
class Finding:
    """One fault or oddity of the structure. code: stable, with its page in docs/reference/errors.md; message: one sentence;
    nets, parts: concerned, in the circuit's order; fatal: no operating point can be determined."""

    code: str
    message: str
    nets: tuple[str, ...]
    parts: tuple[str, ...]
    fatal: bool


@dataclass(frozen=True, slots=True)
class _Edge:
    """A branch of a part between two nodes."""

    part: str
    first: Key
    second: Key
    way: str
    controlled: bool


@dataclass(frozen=True)
class _Graph:
    """All branches, and what every part contributes, for questions that the branches alone do not answer."""

    circuit: Circuit
    edges: tuple[_Edge, ...]
    contributions: tuple[tuple[Part, Contribution], ...]

    @cached_property
    def nodes(self) -> tuple[Key, ...]:
        found = dict.fromkeys([GROUND, *(("net", net) for net in self.circuit.nets)])
        for edge in self.edges:
            found.update(dict.fromkeys(node for node in (edge.first, edge.second) if node[0] != "current"))
        return tuple(found)

    def is_settled(self, shift: Mapping[Key, float]) -> bool:
        """Whether unknowns that move together by `shift` are held by some equation, and hold some equation themselves:
        unless both are so, no value of the parts makes the equations regular."""
        return self.is_felt(shift) and self.depends(shift)

    def is_felt(self, shift: Mapping[Key, float]) -> bool:
        """Whether any equation notices that the unknowns move together by `shift`."""
        total: defaultdict[Key, float] = defaultdict(float)
        for part, given in self.contributions:
            rows: dict[Key, list[float]] = {}
            for row, column, value in given.conductance:
                rows.setdefault(resolve(part, row), []).append(shift.get(resolve(part, column), 0.0) * value)
            for key, terms in rows.items():
                total[key] += _settled(terms)
            for line in (line for term in given.terms for line in (term.control, term.factor)):
                if _settled([shift.get(resolve(part, symbol), 0.0) * value for symbol, value in line]):
                    return True
        return any(value for key, value in total.items() if key != GROUND)

    def depends(self, combination: Mapping[Key, float]) -> bool:
        """Whether the sum of the equations of these unknowns, weighted so, holds any unknown at all."""
        total: defaultdict[Key, float] = defaultdict(float)
        for part, given in self.contributions:
            columns: dict[Key, list[float]] = {}
            for row, column, value in given.conductance:
                columns.setdefault(resolve(part, column), []).append(
                    combination.get(resolve(part, row), 0.0) * value
                )
            for key, terms in columns.items():
                total[key] += _settled(terms)
            for term in given.terms:
                if _settled(
                    [combination.get(resolve(part, row), 0.0) * weight for row, weight in term.outputs]
                ):
                    return True
        return any(value for key, value in total.items() if key != GROUND)

    def part_names(self, names: Iterable[str]) -> tuple[str, ...]:
        """In the circuit's order."""
        wanted = set(names)
        return tuple(part.name for part in self.circuit.parts if part.name in wanted)


def _settled(terms: list[float]) -> float:
    """Their sum, nil where it is no more than rounding."""
    total = sum(terms)
    return total if abs(total) > ROUNDING * sum(map(abs, terms)) else 0.0


def findings(circuit: Circuit) -> tuple[Finding, ...]:
    """Everything odd about the structure, fatal things first. CircuitError only for what keeps the equations from being set
    up."""
    graph = _graph(circuit)
    found = [*_empty(graph), *_missing_ground(graph), *_floating(graph), *_voltage_loops(graph)]
    if not any(finding.fatal for finding in found):
        found += _undetermined(graph)
    found += [*_short_circuited(graph), *_single_connections(graph), *_no_current(graph)]
    return tuple(sorted(found, key=lambda finding: not finding.fatal))


def check(circuit: Circuit) -> None:
    """CircuitError for the first fatal finding, at the place of the first part concerned."""
    for finding in findings(circuit):
        if finding.fatal:
            raise with_way_out(CircuitError(finding.code, finding.message, _place(circuit, finding)))


def _place(circuit: Circuit, finding: Finding) -> Span | None:
    """Of the first part that is named, else of the first that touches a net named, else of the first part."""
    named = [part for part in circuit.parts if part.name in finding.parts]
    touching = [
        part for part in circuit.parts if {*part.pins.values(), part.fields.get("control")} & set(finding.nets)
    ]
    part = next(iter((*named, *touching, *circuit.parts)), None)
    if part is not None:
        return part.span
    return Span(circuit.file, 1, 1, 2) if circuit.file else None


def _graph(circuit: Circuit) -> _Graph:
    laid_out = plan(circuit)
    edges: list[_Edge] = []
    contributions = []
    for entry in laid_out.parts:
        contribution = part_contribution(entry, laid_out.parameters.nominal, circuit.curves)
        contributions.append((entry.part, contribution))
        for branch in contribution.branches:
            ends = resolve(entry.part, branch.first), resolve(entry.part, branch.second)
            edges.append(_Edge(entry.part.name, *ends, branch.way, branch.controlled))
    return _Graph(circuit, tuple(edges), tuple(contributions))


def _listed(names: Sequence[str]) -> str:
    """`a`, `b` and `c`, shortened."""
    quoted = [f"`{name}`" for name in names[:SHOWN]]
    if len(names) > SHOWN:
        return f"{', '.join(quoted)} and {len(names) - SHOWN} more"
    return quoted[0] if len(quoted) == 1 else f"{', '.join(quoted[:-1])} and {quoted[-1]}" if quoted else ""


def _empty(graph: _Graph) -> list[Finding]:
    if graph.circuit.nets:
        return []
    return [Finding("empty-circuit", "there is no net beside gnd, so no voltage to ask for", (), (), True)]


def _missing_ground(graph: _Graph) -> list[Finding]:
    pins = {net for part in graph.circuit.parts for net in part.pins.values()}
    if "gnd" in pins or not graph.circuit.parts:
        return []
    return [Finding("missing-ground", "no part is joined to gnd", (), (), True)]


def _floating(graph: _Graph) -> list[Finding]:
    """Groups of nets that no conductance and no prescribed voltage joins to gnd.

    A current that follows other voltages may still set them (a transconductor into a capacitor, in a loop): then the sum of
    their balances depends on some unknown, and some equation feels their common voltage. Such a group is no fault by itself,
    but several of them may hang on each other only.
    """
    joined: nx.Graph[Key] = nx.Graph()
    joined.add_nodes_from(graph.nodes)
    joined.add_edges_from(
        (edge.first, edge.second) for edge in graph.edges if edge.way in ("conductance", "voltage")
    )
    groups = [group for group in nx.connected_components(joined) if GROUND not in group]
    loose = [group for group in groups if not graph.is_settled(dict.fromkeys(group, 1.0))]
    held = set().union(*(group for group in groups if group not in loose))
    if held and not graph.is_settled(dict.fromkeys(held, 1.0)):
        loose.append(held)
    return [_floating_finding(graph, group) for group in loose]


def _floating_finding(graph: _Graph, group: Set[Key]) -> Finding:
    """What joins the group to the rest, if anything."""
    nets = tuple(name for name in graph.circuit.nets if ("net", name) in group)
    crossing = [edge for edge in graph.edges if (edge.first in group) != (edge.second in group)]
    currents = graph.part_names(edge.part for edge in crossing if edge.way == "current")
    capacitors = graph.part_names(edge.part for edge in crossing if edge.way == "capacitance")
    touching = graph.part_names(
        part.name for part in graph.circuit.parts if set(part.pins.values()) & set(nets)
    )
    ways = {edge.way for edge in graph.edges if edge.first in group or edge.second in group}
    inputs = touching if ways == {"sense"} else ()
    what = f"net {_listed(nets)}" if len(nets) == 1 else f"nets {_listed(nets)}"
    if currents:
        beside = f" and capacitors {_listed(capacitors)}" if capacitors else ""
        text = f"{what}: joined to the rest only by current sources {_listed(currents)}{beside}, so that nothing sets a voltage"
        return Finding("current-cut", text, nets, (*currents, *capacitors), True)
    if capacitors:
        text = f"{what}: joined to the rest only by capacitors {_listed(capacitors)}, so that nothing sets a voltage at rest"
        return Finding("floating-net", text, nets, capacitors, True)
    if inputs:
        return Finding(
            "floating-net", f"{what}: only inputs of {_listed(inputs)} are joined to it", nets, inputs, True
        )
    text = f"{what}: no path for direct current leads from there to gnd"
    if touching:
        text += f"; {_listed(touching)} {'is' if len(touching) == 1 else 'are'} joined to it"
    return Finding("floating-net", text, nets, touching, True)


def _voltage_loops(graph: _Graph) -> list[Finding]:
    """Loops of prescribed voltages (inductors count, at DC). The current round a loop is free, so the loop is a fault,
    unless some equation feels that current and the sum of the loop's laws depends on some unknown."""
    forest: nx.Graph[Key] = nx.Graph()
    forest.add_nodes_from(graph.nodes)
    owners: dict[frozenset[Key], _Edge] = {}
    found = []
    for edge in graph.edges:
        if edge.way != "voltage":
            continue
        if edge.first == edge.second or nx.has_path(forest, edge.first, edge.second):
            path = (
                [edge.first]
                if edge.first == edge.second
                else nx.shortest_path(forest, edge.first, edge.second)
            )
            loop = [edge, *(owners[frozenset(pair)] for pair in pairwise(path))]
            if not graph.is_settled(_round_the_loop(graph, loop, path)):
                found.append(_loop_finding(graph, loop, path))
            continue
        forest.add_edge(edge.first, edge.second)
        owners[frozenset((edge.first, edge.second))] = edge
    return found


def _round_the_loop(graph: _Graph, loop: Sequence[_Edge], path: Sequence[Key]) -> dict[Key, float]:
    """A current of 1 A round a loop: the unknown current of every branch. The first branch closes the path, against its arrow."""
    names = {part.name: {unknown.name for unknown in given.unknowns} for part, given in graph.contributions}

    def current(entry: _Edge) -> Key:
        return (
            ("current", entry.part)
            if "current" in names[entry.part]
            else ("internal", f"{entry.part}.output_current")
        )

    found = {current(loop[0]): -1.0}
    for entry, start in zip(loop[1:], path[:-1], strict=True):
        found[current(entry)] = 1.0 if entry.first == start else -1.0
    return found


def _loop_finding(graph: _Graph, loop: Sequence[_Edge], path: Sequence[Key]) -> Finding:
    parts = graph.part_names(entry.part for entry in loop)
    nets = tuple(name for kind, name in path if kind == "net" and name != "gnd")
    if len(parts) == 1:
        text = f"`{parts[0]}` prescribes a voltage between a net and itself"
    else:
        text = f"{_listed(parts)} prescribe voltages all round a loop, so that its current is not determined"
    return Finding("voltage-loop", text, nets, parts, True)


def _undetermined(graph: _Graph) -> list[Finding]:
    """Unknowns that no equation is left for, by the largest matching of the pattern of the Jacobian: what the rules above do
    not see."""
    laid_out = plan(graph.circuit)
    system = assemble_sparse(graph.circuit)
    n = system.n
    if n == 0:
        return []
    pattern = scipy.sparse.csr_array(abs(system.G) + abs(system.B) @ (abs(system.W) + abs(system.V)))
    pattern.eliminate_zeros()
    matched = maximum_bipartite_matching(pattern, perm_type="column")
    taken = set(matched[matched >= 0].tolist())
    free = [laid_out.unknowns[j] for j in range(n) if j not in taken]
    if not free:
        return []
    names = [name for _, name in free]
    nets = tuple(name for kind, name in free if kind == "net")
    parts = graph.part_names(
        name.rsplit(".", 1)[0] if kind == "internal" else name for kind, name in free if kind != "net"
    )
    return [Finding("undetermined", f"no equation determines {_listed(names)}", nets, parts, True)]


def _short_circuited(graph: _Graph) -> list[Finding]:
    found = []
    prescribing = {edge.part for edge in graph.edges if edge.way == "voltage"}
    for part in graph.circuit.parts:
        nets = set(part.pins.values())
        if len(nets) == 1 and not (part.name in prescribing and len(part.pins) == 2):
            net = next(iter(nets))
            text = f"all pins of `{part.name}` are joined to `{net}`, so that it does nothing"
            found.append(
                Finding("short-circuited", text, () if net == "gnd" else (net,), (part.name,), False)
            )
    return found


def _single_connections(graph: _Graph) -> list[Finding]:
    touched = Counter(net for part in graph.circuit.parts for net in part.pins.values())
    pins = {part.name: set(part.pins.values()) for part in graph.circuit.parts}
    # a formula or the control of a switch reads a net where its part has no pin
    touched.update(
        {
            edge.first[1]
            for edge in graph.edges
            if edge.way == "sense" and edge.first[1] not in pins[edge.part]
        }
    )
    owner = {net: part for part in graph.circuit.parts for net in part.pins.values()}
    found = []
    for net in graph.circuit.nets:
        if touched[net] == 1:
            part = owner.get(net)
            text = f"net `{net}` is used once" + (f", by `{part.name}`" if part else "")
            found.append(Finding("single-connection", text, (net,), (part.name,) if part else (), False))
    return found


def _no_current(graph: _Graph) -> list[Finding]:
    """Parts with two pins whose current can only be zero at rest: the only way between two halves of the circuit."""
    carries = [
        edge
        for edge in graph.edges
        if edge.way in ("conductance", "voltage", "current") and edge.first != edge.second
    ]
    count = Counter(frozenset((edge.first, edge.second)) for edge in carries)
    joined: nx.Graph[Key] = nx.Graph()
    joined.add_edges_from((edge.first, edge.second) for edge in carries)
    bridges: set[frozenset[Key]] = {
        frozenset((a, b)) for a, b in cast("Iterable[tuple[Key, Key]]", nx.bridges(joined))
    }
    alone = {pair for pair in bridges if count[pair] == 1}
    two = {part.name for part in graph.circuit.parts if len(part.pins) == 2}
    resistive = [edge for edge in carries if edge.way == "conductance" and edge.part in two]
    idle = graph.part_names(edge.part for edge in resistive if frozenset((edge.first, edge.second)) in alone)
    if not idle:
        return []
    return [Finding("no-current", f"no current can flow at rest through {_listed(idle)}", (), idle, False)]
