"""A circuit laid out once: where every number of every part stands in the arrays, so that a new set of values is arithmetic only.

Each array is a sum of slots: slot j holds one value of one part and belongs to one position. For changed settings only the parts that
depend on them are asked again; arrays whose slots did not change are shared with the nominal system.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from itertools import pairwise
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.circuit import Circuit, Coupling, Curve, FieldValue, Part, Waveform
from loopsim.devices.catalogue import DEVICES, Device, field_specs
from loopsim.devices.contribution import Contribution, Symbol, Timed, with_current
from loopsim.devices.curves import everywhere
from loopsim.devices.fields import FieldSpec, Scalar
from loopsim.devices.formula import sum_of
from loopsim.devices.waveforms import WAVEFORMS, waveform, waveform_specs
from loopsim.equations.parameters import (
    AMBIENT,
    ParameterPlan,
    checked_settings,
    curve_values,
    evaluated,
    is_finite,
    names_in,
    names_in_curve,
    number,
    parameter_plan,
    unknown_let,
)
from loopsim.equations.system import System, TimedSource
from loopsim.equations.traced import AFFINE, Traced, degrees_of
from loopsim.errors import CircuitError, Span
from loopsim.expressions import CurrentRef, Expression, NetRef, Operation, references

Array: TypeAlias = NDArray[np.float64]
Values: TypeAlias = dict[str, list[Scalar]]
Key: TypeAlias = tuple[str, str]

ARRAYS = ("C", "G", "B", "W", "c", "V", "d", "s", "supply", "parameters")
_CACHE = "_equations_plan"  # attribute of a Circuit in which its plan is kept


@dataclass(frozen=True, eq=False)
class PartPlan:
    """part; device: its class; specs: of its fields; roots: every parameter that moves it; split: its current was made an unknown;
    terms: its rows of the nonlinear vector; timed: its waveforms in the order of the contribution."""

    part: Part
    device: type[Device]
    specs: Mapping[str, FieldSpec]
    roots: frozenset[str]
    split: bool = False
    terms: tuple[int, ...] = ()


@dataclass(frozen=True, eq=False)
class Layout:
    """Where the slots of one array stand. positions: (slots,) flat, -1 for gnd; order, starts, targets: how they are summed;
    spans: per part plan, its first and last slot."""

    shape: tuple[int, ...]
    positions: NDArray[np.int64]
    order: NDArray[np.int64]
    starts: NDArray[np.int64]
    targets: NDArray[np.int64]
    spans: tuple[tuple[int, int], ...]

    def gather(self, values: Array) -> Array:
        """(..., slots) to the array (..., *shape). One rule of summation whatever the batch, so that a batch equals its members."""
        out = np.zeros((*values.shape[:-1], int(np.prod(self.shape, dtype=np.int64))))
        if len(self.starts):
            out[..., self.targets] = np.add.reduceat(values[..., self.order], self.starts, axis=-1)
        return out.reshape(*values.shape[:-1], *self.shape)


def _layout(shape: tuple[int, ...], blocks: Sequence[Sequence[int]]) -> Layout:
    positions = np.array([p for block in blocks for p in block], dtype=np.int64)
    ends = np.cumsum([0, *(len(block) for block in blocks)])
    order = np.argsort(positions, kind="stable")
    order = order[np.count_nonzero(positions < 0) :]
    targets, starts = np.unique(positions[order], return_index=True)
    spans = tuple((int(a), int(b)) for a, b in pairwise(ends))
    return Layout(shape, positions, order, starts, targets, spans)


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
    """parts: one a part, in order, then one a coupling (part None is not used: couplings stand in `couplings`)."""

    circuit: Circuit
    parameters: ParameterPlan
    parts: tuple[PartPlan, ...]
    couplings: tuple[tuple[Coupling, int, int, frozenset[str]], ...]
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
            name: np.array([value for block in self.nominal_blocks for value in block[name]], dtype=float) for name in ARRAYS
        }

    @cached_property
    def nominal(self) -> System:
        """The system with nothing set from outside."""
        arrays = {name: _read_only(self.layouts[name].gather(self.vectors[name])) for name in ARRAYS}
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
            roots = [*(part.roots for part in self.parts), *(entry[3] for entry in self.couplings)]
            self.affected[key] = moved, tuple(j for j, names in enumerate(roots) if names & key)
        return self.affected[key]

    def changed(self, settings: Mapping[str, Any]) -> tuple[dict[str, Array], dict[int, tuple[Timed, ...]]]:
        """Slots of every array that settings move, (slots,) or (batch, slots), and the waveforms of parts that they move."""
        given = checked_settings(self.parameters, settings)
        if not given:
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
                if block[name] and not _same(block[name], old[name]):
                    changes.setdefault(name, []).append((*self.layouts[name].spans[j], block[name]))
        for name, entries in changes.items():
            vectors[name] = _filled(self.vectors[name], entries)
        return vectors, timed

    def block(self, j: int, values: Mapping[str, Scalar]) -> tuple[Values, tuple[Timed, ...]]:
        """The slots of part (or coupling) j at some values."""
        if j >= len(self.parts):
            coupling, first, second, _ = self.couplings[j - len(self.parts)]
            return _coupling_block(self, coupling, first, second, values), ()
        contribution = part_contribution(self.parts[j], values, self.circuit.curves)
        return slots_of(contribution), contribution.timed

    def assemble(self, settings: Mapping[str, Any]) -> System:
        """The system at some settings."""
        vectors, waves = self.changed(settings) if settings else ({}, {})
        base = self.nominal
        if not vectors and not waves:
            return base
        arrays = {
            name: self.layouts[name].gather(vectors[name]) if name in vectors else getattr(base, name) for name in ARRAYS
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
            unknowns=self.unknowns, kinds=self.kinds, owners=self.owners, timed=timed, row_units=self.row_units, **arrays
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
                found.append(TimedSource(_read_only(column), Batched(entry.waveform) if batched else entry.waveform))
        return tuple(found)

    @cached_property
    def traced(self) -> dict[str, dict[str, int]]:
        """Per array, and `timed`: every parameter that moves it, and whether in a straight line (loopsim.equations.traced)."""
        values: dict[str, Scalar] = {}
        for name in self.parameters.order:
            formula = self.parameters.formulas[name]
            values[name] = number(formula.value, values, self.parameters.curves, name, formula.span) + Traced({name: AFFINE})
        found: dict[str, dict[str, int]] = {name: {} for name in (*ARRAYS, "timed")}
        for j in range(len(self.parts) + len(self.couplings)):
            block, waves = self.block(j, values)
            for name in ARRAYS:
                for value in block[name]:
                    for root, degree in degrees_of(value).items():
                        found[name][root] = max(degree, found[name].get(root, 0))
            if waves:
                found["timed"].update(dict.fromkeys(self.parts[j].roots, 2))
        return found


def _no_plan() -> None:
    return None


def plan(circuit: Circuit) -> Plan:
    """The plan of a circuit, made once and kept with it."""
    kept = vars(circuit).get(_CACHE)
    if kept is None:
        kept = make_plan(circuit)
        vars(circuit)[_CACHE] = kept  # a frozen dataclass forbids setattr; the plan is no part of what the circuit is
    assert isinstance(kept, Plan)
    return kept


def make_plan(circuit: Circuit) -> Plan:
    """Check pins and fields of every part and find the place of each of its numbers."""
    parameters = parameter_plan(circuit)
    nets = frozenset(("gnd", *circuit.nets))
    parts = [_part_plan(part, circuit, nets, parameters) for part in circuit.parts]
    _check_names(circuit)
    contributions = [part_contribution(entry, parameters.nominal, circuit.curves) for entry in parts]
    wanted = _currents_read(contributions)
    for j, (entry, contribution) in enumerate(zip(parts, contributions, strict=True)):
        name = entry.part.name
        if name in wanted and not any(unknown.name == "current" for unknown in contribution.unknowns):
            if entry.device.pins != ("from", "to"):
                raise CircuitError(
                    "unknown-current", f"`{name}` has more than two pins, so it has no one current", entry.part.span,
                    "put a part with two pins in series and read its current",
                )  # fmt: skip
            parts[j] = PartPlan(entry.part, entry.device, entry.specs, entry.roots, split=True)
            contributions[j] = with_current(contribution)
    unknowns: list[Key] = [("net", net) for net in circuit.nets]
    units = ["A"] * len(unknowns)
    for entry, contribution in zip(parts, contributions, strict=True):
        unknowns += [resolve(entry.part, unknown.name) for unknown in contribution.unknowns]
        units += [unknown.row_unit for unknown in contribution.unknowns]
    index = {unknown: i for i, unknown in enumerate(unknowns)}
    row = 0
    kinds: list[int] = []
    owners: list[str] = []
    for j, (entry, contribution) in enumerate(zip(parts, contributions, strict=True)):
        count = len(contribution.terms)
        parts[j] = PartPlan(
            entry.part, entry.device, entry.specs, _all_roots(entry, parameters, circuit), entry.split, tuple(range(row, row + count))
        )
        kinds += [int(term.kind) for term in contribution.terms]
        owners += [entry.part.name] * count
        row += count
    couplings = tuple(_coupling_plan(coupling, circuit, parameters) for coupling in circuit.couplings)
    width = max((len(term.parameters) for contribution in contributions for term in contribution.terms), default=0)
    n, m = len(unknowns), row
    shapes = {
        "C": (n, n), "G": (n, n), "B": (n, m), "W": (m, n), "c": (m,), "V": (m, n), "d": (m,), "s": (n,), "supply": (n,),
        "parameters": (m, width),
    }  # fmt: skip
    places = [_places(entry, contribution, index, (n, m, width)) for entry, contribution in zip(parts, contributions, strict=True)]
    places += [_coupling_places(entry, index, circuit, n) for entry in couplings]
    layouts = {name: _layout(shapes[name], [place[name] for place in places]) for name in ARRAYS}
    unfinished = Plan(
        circuit, parameters, tuple(parts), couplings, tuple(unknowns), index, tuple(units), np.array(kinds, dtype=np.int64),
        tuple(owners), layouts, (), (),
    )  # fmt: skip
    blocks = [slots_of(contribution) for contribution in contributions]
    for coupling, first, second, _ in couplings:
        blocks.append(_coupling_block(unfinished, coupling, first, second, parameters.nominal))
    return Plan(
        circuit, parameters, tuple(parts), couplings, tuple(unknowns), index, tuple(units), unfinished.kinds, tuple(owners), layouts,
        tuple(blocks), tuple(contribution.timed for contribution in contributions),
    )  # fmt: skip


# --- parts ---------------------------------------------------------------------------------------------------------------------


def _part_plan(part: Part, circuit: Circuit, nets: frozenset[str], parameters: ParameterPlan) -> PartPlan:
    if part.device not in DEVICES:
        near = difflib.get_close_matches(part.device, DEVICES, 1)
        hint = f"did you mean `{near[0]}`?" if near else ""
        raise CircuitError("unknown-device", f"there is no device `{part.device}`", part.span, hint)
    device, specs = DEVICES[part.device], field_specs(part.device)
    for pin in device.pins:
        if pin not in part.pins:
            raise CircuitError("pin-missing", f"`{part.name}`: pin `{pin}` of {part.device} is not connected", part.span)
        if part.pins[pin] not in nets:
            raise CircuitError("unknown-net", f"`{part.name}`: there is no net `{part.pins[pin]}`", part.span)
    for pin in part.pins:
        if pin not in device.pins:
            raise CircuitError(
                "unknown-pin", f"`{part.name}`: {part.device} has no pin `{pin}`", part.span, f"its pins are {', '.join(device.pins)}"
            )
    for name in part.fields:
        if name not in specs:
            near = difflib.get_close_matches(name, specs, 1)
            hint = f"did you mean `{near[0]}`?" if near else f"its fields are {', '.join(specs)}"
            raise CircuitError("unknown-field", f"`{part.name}`: {part.device} has no field `{name}`", part.span, hint)
    for name, spec in specs.items():
        if spec.required and name not in part.fields:
            raise CircuitError("field-missing", f"`{part.name}`: {part.device} needs `{name}`", part.span, spec.help)
    roots: set[str] = set()
    for value in part.fields.values():
        for name in _names_in_field(value, circuit.curves):
            if name not in parameters.formulas:
                raise unknown_let(name, parameters.formulas, part.span)
            roots |= parameters.roots[name]
    return PartPlan(part, device, specs, frozenset(roots))


def _trees(value: FieldValue) -> tuple[Expression, ...]:
    """Every formula inside a field."""
    if isinstance(value, str):
        return ()
    if isinstance(value, Curve):
        return value.values
    if isinstance(value, Waveform):
        return (*value.fields.values(), *(tree for pair in value.points for tree in pair))
    return (value,)


def _names_in_field(value: FieldValue, curves: Mapping[str, Curve]) -> frozenset[str]:
    if isinstance(value, str):
        return names_in_curve(curves[value], curves) if value in curves else frozenset()
    return frozenset().union(*(names_in(tree, curves) for tree in _trees(value)))


def _check_names(circuit: Circuit) -> None:
    """Nets, parts and curves that formulas name must be there."""
    nets, names = {"gnd", *circuit.nets}, {part.name for part in circuit.parts}
    if len(names) != len(circuit.parts):
        double = sorted(part.name for part in circuit.parts if sum(other.name == part.name for other in circuit.parts) > 1)
        raise CircuitError("duplicate-part", f"two parts are called `{double[0]}`", circuit.parts[-1].span)
    for part in circuit.parts:
        for field_name, value in part.fields.items():
            if field_name == "control" and isinstance(value, str) and value not in nets:
                raise CircuitError("unknown-net", f"`{part.name}`: there is no net `{value}`", part.span)
            for tree in _trees(value):
                for reference in references(tree):
                    if isinstance(reference, NetRef) and reference.name not in nets:
                        raise CircuitError("unknown-net", f"`{part.name}`: there is no net `{reference.name}`", part.span)
                    if isinstance(reference, CurrentRef) and reference.part not in names:
                        raise CircuitError("unknown-part", f"`{part.name}`: there is no part `{reference.part}`", part.span)
                for name in _curve_names(tree):
                    if name not in circuit.curves:
                        raise CircuitError("unknown-curve", f"`{part.name}`: there is no curve `{name}`", part.span)


def _curve_names(tree: Expression) -> set[str]:
    if not isinstance(tree, Operation):
        return set()
    found = {tree.curve} if tree.name == "curve" else set()
    return found.union(*(_curve_names(argument) for argument in tree.arguments))


def _currents_read(contributions: Sequence[Contribution]) -> set[str]:
    """Parts whose current some formula reads."""
    return {
        branch.first[1]
        for contribution in contributions
        for branch in contribution.branches
        if branch.way == "sense" and isinstance(branch.first, tuple) and branch.first[0] == "current"
    }


def _all_roots(entry: PartPlan, parameters: ParameterPlan, circuit: Circuit) -> frozenset[str]:
    """The roots of a part's fields, and those of `ambient` where the temperature moves it."""
    values = {**parameters.nominal, AMBIENT: Traced({AMBIENT: AFFINE})}
    block = slots_of(part_contribution(entry, values, circuit.curves))
    moved = any(AMBIENT in degrees_of(value) for name in ARRAYS for value in block[name])
    return entry.roots | parameters.roots[AMBIENT] if moved else entry.roots


def device_of(entry: PartPlan, values: Mapping[str, Scalar], curves: Mapping[str, Curve]) -> Device:
    """The device with its numbers put in and their ranges checked."""
    given: dict[str, Any] = {}
    part = entry.part
    for name, value in part.fields.items():
        given[name] = _field_value(part, entry.specs[name], value, values, curves)
    return entry.device(**given)


def part_contribution(entry: PartPlan, values: Mapping[str, Scalar], curves: Mapping[str, Curve]) -> Contribution:
    """What a part adds to the equations at some values; mistakes get its name and place."""
    try:
        contribution = device_of(entry, values, curves).contribution(values[AMBIENT])
    except CircuitError as fault:
        if fault.span is not None or fault.code == "field-range":
            raise
        raise CircuitError(fault.code, f"`{entry.part.name}`: {fault.message}", entry.part.span, fault.hint) from None
    return with_current(contribution) if entry.split else contribution


def _field_value(
    part: Part, spec: FieldSpec, value: FieldValue, values: Mapping[str, Scalar], curves: Mapping[str, Curve]
) -> Any:
    what = f"`{part.name}.{spec.name}`"
    if spec.form == "curve":
        found = curves[value] if isinstance(value, str) and value in curves else value
        if not isinstance(found, Curve):
            raise CircuitError("field-kind", f"{what} must be a curve", part.span)
        return curve_values(found, values, curves)
    if spec.form in ("word", "net"):
        if not isinstance(value, str) or (spec.words and value not in spec.words):
            words = " or ".join(spec.words) or "the name of a net"
            raise CircuitError("field-kind", f"{what} must be {words}", part.span)
        return value
    if isinstance(value, Waveform) and spec.form == "source":
        return _waveform(part, spec, value, values, curves)
    if isinstance(value, str | Curve | Waveform):
        raise CircuitError("field-kind", f"{what} must be a number", part.span)
    if spec.form == "formula":
        known = {name: curve_values(curves[name], values, curves) for name in _curve_names(value)}
        with np.errstate(all="ignore"):
            return sum_of(value, values, known)
    return in_range(number(value, values, curves, what, part.span), spec, what, part.span)


def _waveform(part: Part, spec: FieldSpec, value: Waveform, values: Mapping[str, Scalar], curves: Mapping[str, Curve]) -> Any:
    if value.form not in WAVEFORMS:
        raise CircuitError("unknown-waveform", f"there is no waveform `{value.form}`", part.span, f"there are {', '.join(WAVEFORMS)}")
    specs = waveform_specs(value.form)
    given = {}
    for name, tree in value.fields.items():
        what = f"`{part.name}`: {value.form} `{name}`"
        if name not in specs:
            raise CircuitError("unknown-field", f"{what} is no field of it", part.span, f"its fields are {', '.join(specs)}")
        given[name] = in_range(number(tree, values, curves, what, part.span), specs[name], what, part.span)
    for name, entry in specs.items():
        if entry.required and name not in given:
            raise CircuitError("field-missing", f"`{part.name}`: {value.form} needs `{name}`", part.span, entry.help)
    what = f"a point of `{part.name}`"
    points = [(number(t, values, curves, what, part.span), number(v, values, curves, what, part.span)) for t, v in value.points]
    return waveform(value.form, given, points)


def in_range(value: Scalar, spec: FieldSpec, what: str, span: Span | None) -> Scalar:
    """The value, if it lies within the field's range; CircuitError `field-range` otherwise."""
    low, high = spec.low, spec.high
    if low is None or high is None or isinstance(value, Traced):
        return value
    if not is_finite(value) or not everywhere((low <= value) & (value <= high)):
        unit = "" if spec.unit == "signal" else spec.unit
        worst = value if np.ndim(value) == 0 else value[np.argmax(~((low <= value) & (value <= high)))]
        raise CircuitError("field-range", f"{what} is {worst:g} {unit}".rstrip(), span, f"it must lie within {low:g} .. {high:g} {unit}".rstrip())
    return value


def resolve(part: Part, symbol: Symbol) -> Key:
    """The unknown that a symbol of a part's contribution stands for; gnd is the key ("net", "gnd")."""
    if isinstance(symbol, tuple):
        return symbol
    if symbol in part.pins:
        return ("net", part.pins[symbol])
    return ("current", part.name) if symbol == "current" else ("internal", f"{part.name}.{symbol}")


# --- slots: `_places` and `slots_of` go through a contribution in the same order ----------------------------------------------


def _places(entry: PartPlan, given: Contribution, index: Mapping[Key, int], size: tuple[int, int, int]) -> dict[str, list[int]]:
    """The flat position of every slot of a part, -1 for gnd."""
    n, m, width = size

    def at(symbol: Symbol) -> int:
        return index.get(resolve(entry.part, symbol), -1)

    def cell(row: int, column: int, columns: int) -> int:
        return -1 if row < 0 or column < 0 else row * columns + column

    found: dict[str, list[int]] = {name: [] for name in ARRAYS}
    found["G"] = [cell(at(row), at(column), n) for row, column, _ in given.conductance]
    found["C"] = [cell(at(row), at(column), n) for row, column, _ in given.capacitance]
    found["supply"] = [at(row) for row, _ in given.supply]
    found["s"] = [at(row) for row, _ in given.source] + found["supply"]
    for k, term in zip(entry.terms, given.terms, strict=True):
        found["W"] += [cell(k, at(symbol), n) for symbol, _ in term.control]
        found["V"] += [cell(k, at(symbol), n) for symbol, _ in term.factor]
        found["B"] += [cell(at(symbol), k, m) for symbol, _ in term.outputs]
        found["c"].append(k)
        found["d"].append(k)
        found["parameters"] += [k * width + j for j in range(len(term.parameters))]
    return found


def slots_of(given: Contribution) -> Values:
    """The value of every slot of a part."""
    supply = [value for _, value in given.supply]
    terms = given.terms
    return {
        "G": [value for _, _, value in given.conductance],
        "C": [value for _, _, value in given.capacitance],
        "supply": supply,
        "s": [value for _, value in given.source] + supply,
        "W": [value for term in terms for _, value in term.control],
        "V": [value for term in terms for _, value in term.factor],
        "B": [value for term in terms for _, value in term.outputs],
        "c": [term.offset for term in terms],
        "d": [term.factor_offset for term in terms],
        "parameters": [value for term in terms for value in term.parameters],
    }


def _same(new: list[Scalar], old: list[Scalar]) -> bool:
    return not any(isinstance(value, np.ndarray) for value in new) and new == old


def _filled(nominal: Array, entries: Sequence[tuple[int, int, list[Scalar]]]) -> Array:
    """The nominal slots with some stretches replaced; (batch, slots) where any new value is an array."""
    length = next((len(v) for _, _, block in entries for v in block if isinstance(v, np.ndarray) and v.ndim), None)
    if length is None:
        vector = nominal.copy()
        for start, stop, block in entries:
            vector[start:stop] = block
        return vector
    vector = np.tile(nominal, (length, 1))
    for start, _, block in entries:
        for j, value in enumerate(block):
            vector[:, start + j] = value
    return vector


def _read_only(array: Array) -> Array:
    array.flags.writeable = False  # systems share it
    return array


# --- couplings -----------------------------------------------------------------------------------------------------------------


def _coupling_plan(
    coupling: Coupling, circuit: Circuit, parameters: ParameterPlan
) -> tuple[Coupling, int, int, frozenset[str]]:
    found = []
    for name in (coupling.first, coupling.second):
        position = next((j for j, part in enumerate(circuit.parts) if part.name == name), None)
        if position is None or circuit.parts[position].device != "inductor":
            raise CircuitError("unknown-inductor", f"`{name}` is no inductor of this circuit", coupling.span)
        found.append(position)
    if found[0] == found[1]:
        raise CircuitError("unknown-inductor", f"`{coupling.first}` cannot be coupled to itself", coupling.span)
    names = names_in(coupling.coefficient, circuit.curves)
    for position in found:
        names |= names_in(_inductance(circuit.parts[position]), circuit.curves)
    for name in names:
        if name not in parameters.formulas:
            raise unknown_let(name, parameters.formulas, coupling.span)
    roots = frozenset().union(*(parameters.roots[name] for name in names)) if names else frozenset()
    return coupling, found[0], found[1], roots


def _inductance(part: Part) -> Expression:
    value = part.fields["inductance"]
    assert not isinstance(value, str | Curve | Waveform)
    return value


_COEFFICIENT = FieldSpec("coefficient", "", None, -1.0, 1.0, (), "coupling coefficient")


def _coupling_block(given: Plan, coupling: Coupling, first: int, second: int, values: Mapping[str, Scalar]) -> Values:
    """M = k sqrt(L1 L2), which each branch law takes from the other current."""
    curves = given.circuit.curves
    what = f"the coupling of `{coupling.first}` and `{coupling.second}`"
    k = in_range(number(coupling.coefficient, values, curves, what, coupling.span), _COEFFICIENT, what, coupling.span)
    product = 1.0
    for position in (first, second):
        part = given.parts[position].part
        product = product * number(_inductance(part), values, curves, f"`{part.name}`", part.span)
    mutual = k * np.sqrt(product)
    return {**{name: [] for name in ARRAYS}, "C": [mutual, mutual]}


def _coupling_places(
    entry: tuple[Coupling, int, int, frozenset[str]], index: Mapping[Key, int], circuit: Circuit, n: int
) -> dict[str, list[int]]:
    one, two = (index["current", circuit.parts[position].name] for position in entry[1:3])
    return {**{name: [] for name in ARRAYS}, "C": [one * n + two, two * n + one]}
