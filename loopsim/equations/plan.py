"""A circuit laid out once: where every number of every part stands in the arrays, so that a new set of values is arithmetic only.

For changed settings only the parts that depend on them are asked again; arrays whose slots did not change are shared with
the nominal system.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from loopsim.circuit import Circuit
from loopsim.devices.contribution import Contribution, Symbol, Timed, with_current
from loopsim.devices.fields import Scalar
from loopsim.equations.parameters import ParameterPlan, checked_settings, evaluated, number, parameter_plan
from loopsim.equations.parts import (
    CouplingPlan,
    Key,
    PartPlan,
    all_roots,
    check_names,
    coupling_places,
    coupling_plan,
    coupling_slots,
    currents_read,
    lacks_current,
    part_contribution,
    part_plan,
    resolve,
)
from loopsim.equations.slots import (
    ARRAYS,
    Array,
    Layout,
    Values,
    filled,
    layout_of,
    places_of,
    read_only,
    same,
    slots_of,
)
from loopsim.equations.system import System, TimedSource
from loopsim.equations.traced import AFFINE, OTHER, Traced, degrees_of

_CACHE = "_equations_plan"  # attribute of a Circuit in which its plan is kept


@dataclass(frozen=True, eq=False)
class Batched:
    """A waveform whose numbers are arrays (batch,), with the values as columns (batch, 1) so that they meet a row of unknowns."""

    inner: Any

    def value(self, t: float) -> Scalar:
        found = self.inner.value(t)
        return found[:, None] if isinstance(found, np.ndarray) and found.ndim == 1 else found

    def corners(self, start: float, end: float) -> list[float]:
        corners: list[float] = self.inner.corners(start, end)
        return corners


@dataclass(frozen=True, eq=False)
class Plan:
    """parts, couplings: in the circuit's order. layouts, nominal_blocks: places and nominal numbers of the slots of every
    part, then of every coupling; nominal_timed: the waveforms of every part; affected: per set of names that was set, what
    it moves (filled as asked).
    """

    circuit: Circuit
    parameters: ParameterPlan
    parts: tuple[PartPlan, ...]
    couplings: tuple[CouplingPlan, ...]
    unknowns: tuple[Key, ...]
    index: Mapping[Key, int]
    row_units: tuple[str, ...]
    kinds: NDArray[np.int64]
    owners: tuple[str, ...]
    layouts: Mapping[str, Layout]
    nominal_blocks: tuple[Values, ...]
    nominal_timed: tuple[tuple[Timed, ...], ...]
    affected: dict[frozenset[str], tuple[tuple[str, ...], tuple[int, ...]]] = field(default_factory=dict)

    def __reduce__(self) -> tuple[Any, tuple[()]]:
        # a plan is cheap to make anew, and a circuit that travels to another process should not carry it along
        return _no_plan, ()

    @cached_property
    def vectors(self) -> dict[str, Array]:
        """The nominal slots of each array."""
        return {
            name: np.array([value for block in self.nominal_blocks for value in block[name]], dtype=float)
            for name in ARRAYS
        }

    @cached_property
    def nominal(self) -> System:
        """The system with nothing set from outside."""
        arrays = {name: read_only(self.layouts[name].gather(self.vectors[name])) for name in ARRAYS}
        return self._system(arrays, self._timed_sources(self.nominal_timed))

    def values(self, settings: Mapping[str, Any]) -> dict[str, Scalar]:
        """Every parameter."""
        given = checked_settings(self.parameters, settings)
        if not given:
            return dict(self.parameters.nominal)
        return evaluated(self.parameters, self._affected(given)[0], self.parameters.nominal, given)

    def _affected(self, given: Mapping[str, Scalar]) -> tuple[tuple[str, ...], tuple[int, ...]]:
        """The parameters to work out anew and the positions of the parts (couplings after them) that move."""
        key = frozenset(given)
        if key not in self.affected:
            moved = tuple(name for name in self.parameters.order if self.parameters.roots[name] & key)
            roots = [*(part.roots for part in self.parts), *(entry.roots for entry in self.couplings)]
            self.affected[key] = moved, tuple(j for j, names in enumerate(roots) if names & key)
        return self.affected[key]

    def changed(self, settings: Mapping[str, Any]) -> tuple[dict[str, Array], dict[int, tuple[Timed, ...]]]:
        """Slots of every array that settings move, (slots,) or (batch, slots), and the waveforms of parts that they move."""
        given = checked_settings(self.parameters, settings)
        nominal = self.parameters.nominal
        if all(isinstance(value, float) and value == nominal[name] for name, value in given.items()):
            return {}, {}
        names, positions = self._affected(given)
        values = evaluated(self.parameters, names, self.parameters.nominal, given)
        # an array that moves with nothing still gives the batch its length where it is set
        vectors: dict[str, Array] = {}
        timed: dict[int, tuple[Timed, ...]] = {}
        changes: dict[str, list[tuple[int, int, list[Scalar]]]] = {}
        for j in positions:
            block, waves = self.block(j, values)
            if waves:
                timed[j] = waves
            old = self.nominal_blocks[j]
            for name in ARRAYS:
                if block[name] and not same(block[name], old[name]):
                    changes.setdefault(name, []).append((*self.layouts[name].spans[j], block[name]))
        for name, entries in changes.items():
            vectors[name] = filled(self.vectors[name], entries)
        return vectors, timed

    def block(self, j: int, values: Mapping[str, Scalar]) -> tuple[Values, tuple[Timed, ...]]:
        """The slots of part (or coupling) j at some values."""
        if j >= len(self.parts):
            return coupling_slots(self.couplings[j - len(self.parts)], values, self.circuit.curves), ()
        contribution = part_contribution(self.parts[j], values, self.circuit.curves)
        return slots_of(contribution), contribution.timed

    def assemble(self, settings: Mapping[str, Any]) -> System:
        """The system at some settings."""
        vectors, waves = self.changed(settings) if settings else ({}, {})
        base = self.nominal
        if not vectors and not waves:
            return base
        arrays = {
            name: self.layouts[name].gather(vectors[name]) if name in vectors else getattr(base, name)
            for name in ARRAYS
        }
        timed = base.timed
        if waves:
            timed = self._timed_sources([waves.get(j, old) for j, old in enumerate(self.nominal_timed)])
        system = self._system(arrays, timed)
        # what the nominal system worked out from unmoved arrays serves this one too
        known = system.__dict__
        known["index"] = base.index
        if "parameters" not in vectors:
            known["groups"] = base.groups
        if "V" not in vectors and "d" not in vectors:
            known["has_products"] = base.has_products
        return system

    def _system(self, arrays: Mapping[str, Array], timed: tuple[TimedSource, ...]) -> System:
        return System(
            unknowns=self.unknowns,
            kinds=self.kinds,
            owners=self.owners,
            timed=timed,
            row_units=self.row_units,
            **arrays,
        )

    def _timed_sources(self, waves: Iterable[tuple[Timed, ...]]) -> tuple[TimedSource, ...]:
        found = []
        for j, entries in enumerate(waves):
            for entry in entries:
                column = np.zeros(len(self.unknowns))
                for row, weight in entry.outputs:
                    position = self.index.get(resolve(self.parts[j].part, row))
                    if position is not None:
                        column[position] += weight
                batched = isinstance(entry.waveform.value(0.0), np.ndarray)
                found.append(
                    TimedSource(read_only(column), Batched(entry.waveform) if batched else entry.waveform)
                )
        return tuple(found)

    @cached_property
    def traced(self) -> dict[str, dict[str, int]]:
        """Per array, and `timed`: every parameter that moves it, and whether in a straight line (loopsim.equations.traced)."""
        values: dict[str, Scalar] = {}
        for name in self.parameters.order:
            formula = self.parameters.formulas[name]
            values[name] = number(formula.value, values, self.parameters.curves, name, formula.span) + Traced(
                {name: AFFINE}
            )
        found: dict[str, dict[str, int]] = {name: {} for name in (*ARRAYS, "timed")}
        for j in range(len(self.parts) + len(self.couplings)):
            block, waves = self.block(j, values)
            for name in ARRAYS:
                for value in block[name]:
                    for root, degree in degrees_of(value).items():
                        found[name][root] = max(degree, found[name].get(root, 0))
            if waves:
                found["timed"].update(dict.fromkeys(self.parts[j].roots, OTHER))
        return found


def _no_plan() -> None:
    return None


def plan(circuit: Circuit) -> Plan:
    """The plan of a circuit, made once and kept with it."""
    kept = vars(circuit).get(_CACHE)
    if kept is None:
        kept = make_plan(circuit)
        vars(circuit)[_CACHE] = (
            kept  # a frozen dataclass forbids setattr; the plan is no part of what the circuit is
        )
    assert isinstance(kept, Plan)
    return kept


def make_plan(circuit: Circuit) -> Plan:
    """Check pins and fields of every part and find the place of each of its numbers."""
    parameters = parameter_plan(circuit)
    nets = frozenset(("gnd", *circuit.nets))
    parts = [part_plan(part, circuit, nets, parameters) for part in circuit.parts]
    check_names(circuit)
    couplings = tuple(coupling_plan(coupling, circuit, parameters) for coupling in circuit.couplings)
    contributions = [part_contribution(entry, parameters.nominal, circuit.curves) for entry in parts]
    wanted = currents_read(contributions)
    row = 0
    for j, entry in enumerate(parts):
        rows = tuple(range(row, row + len(contributions[j].terms)))
        row += len(rows)
        split = entry.part.name in wanted and lacks_current(entry, contributions[j])
        if split:
            contributions[j] = with_current(contributions[j])
        parts[j] = replace(entry, roots=all_roots(entry, parameters, circuit), split=split, terms=rows)
    pairs = list(zip(parts, contributions, strict=True))
    unknowns: list[Key] = [("net", net) for net in circuit.nets]
    units = ["A"] * len(unknowns)
    for entry, contribution in pairs:
        unknowns += [resolve(entry.part, unknown.name) for unknown in contribution.unknowns]
        units += [unknown.row_unit for unknown in contribution.unknowns]
    index = {unknown: i for i, unknown in enumerate(unknowns)}
    n, m = len(unknowns), row
    width = max(
        (len(term.parameters) for contribution in contributions for term in contribution.terms), default=0
    )

    def places(entry: PartPlan, contribution: Contribution) -> dict[str, list[int]]:
        def at(symbol: Symbol) -> int:
            return index.get(resolve(entry.part, symbol), -1)

        return places_of(contribution, at, entry.terms, (n, m, width))

    shapes = {
        "C": (n, n), "G": (n, n), "B": (n, m), "W": (m, n), "c": (m,), "V": (m, n), "d": (m,), "s": (n,), "supply": (n,),
        "parameters": (m, width),
    }  # fmt: skip
    found = [*(places(*pair) for pair in pairs), *(coupling_places(entry, index) for entry in couplings)]
    return Plan(
        circuit=circuit,
        parameters=parameters,
        parts=tuple(parts),
        couplings=couplings,
        unknowns=tuple(unknowns),
        index=index,
        row_units=tuple(units),
        kinds=np.array(
            [int(term.kind) for contribution in contributions for term in contribution.terms], dtype=np.int64
        ),
        owners=tuple(entry.part.name for entry, contribution in pairs for _ in contribution.terms),
        layouts={name: layout_of(shapes[name], [place[name] for place in found]) for name in ARRAYS},
        nominal_blocks=(
            *(slots_of(contribution) for contribution in contributions),
            *(coupling_slots(entry, parameters.nominal, circuit.curves) for entry in couplings),
        ),
        nominal_timed=tuple(contribution.timed for contribution in contributions),
    )
