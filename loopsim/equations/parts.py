"""Parts and couplings of a circuit against the catalogue: pins and fields checked, what moves them, what they contribute."""

from __future__ import annotations

import difflib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np

from loopsim.circuit import Circuit, Coupling, Curve, Part, Waveform
from loopsim.devices.catalogue import DEVICES, Device, field_specs
from loopsim.devices.contribution import Contribution, Symbol, with_current
from loopsim.devices.fields import FieldSpec, Scalar
from loopsim.equations.fields import curve_names, field_value, in_range, names_in_field, trees
from loopsim.equations.parameters import AMBIENT, ParameterPlan, names_in, number, unknown_let
from loopsim.equations.slots import ARRAYS, Values, slots_of
from loopsim.equations.traced import AFFINE, Traced, degrees_of
from loopsim.errors import CircuitError
from loopsim.expressions import CurrentRef, Expression, NetRef, references

Key: TypeAlias = tuple[str, str]

_COEFFICIENT = FieldSpec("coefficient", "", None, -1.0, 1.0, (), "coupling coefficient")


@dataclass(frozen=True, eq=False)
class PartPlan:
    """part; device: its class; specs: of its fields; roots: every parameter that moves it; split: its current was made an
    unknown; terms: its rows of the nonlinear vector; timed: its waveforms in the order of the contribution."""

    part: Part
    device: type[Device]
    specs: Mapping[str, FieldSpec]
    roots: frozenset[str]
    split: bool = False
    terms: tuple[int, ...] = ()


@dataclass(frozen=True, eq=False)
class CouplingPlan:
    """coupling; inductors: its two parts; roots: every parameter that moves it."""

    coupling: Coupling
    inductors: tuple[Part, Part]
    roots: frozenset[str]


def part_plan(part: Part, circuit: Circuit, nets: frozenset[str], parameters: ParameterPlan) -> PartPlan:
    if part.device not in DEVICES:
        near = difflib.get_close_matches(part.device, DEVICES, 1)
        hint = f"did you mean `{near[0]}`?" if near else ""
        raise CircuitError("unknown-device", f"there is no device `{part.device}`", part.span, hint)
    device, specs = DEVICES[part.device], field_specs(part.device)
    for pin in device.pins:
        if pin not in part.pins:
            raise CircuitError(
                "pin-missing", f"`{part.name}`: pin `{pin}` of {part.device} is not connected", part.span
            )
        if part.pins[pin] not in nets:
            raise CircuitError("unknown-net", f"`{part.name}`: there is no net `{part.pins[pin]}`", part.span)
    for pin in part.pins:
        if pin not in device.pins:
            hint = f"its pins are {', '.join(device.pins)}"
            raise CircuitError(
                "unknown-pin", f"`{part.name}`: {part.device} has no pin `{pin}`", part.span, hint
            )
    for name in part.fields:
        if name not in specs:
            near = difflib.get_close_matches(name, specs, 1)
            hint = f"did you mean `{near[0]}`?" if near else f"its fields are {', '.join(specs)}"
            raise CircuitError(
                "unknown-field", f"`{part.name}`: {part.device} has no field `{name}`", part.span, hint
            )
    for name, spec in specs.items():
        if spec.required and name not in part.fields:
            raise CircuitError(
                "field-missing", f"`{part.name}`: {part.device} needs `{name}`", part.span, spec.help
            )
    roots: set[str] = set()
    for value in part.fields.values():
        for name in names_in_field(value, circuit.curves):
            if name not in parameters.formulas:
                raise unknown_let(name, parameters.formulas, part.span)
            roots |= parameters.roots[name]
    return PartPlan(part, device, specs, frozenset(roots))


def check_names(circuit: Circuit) -> None:
    """Nets, parts and curves that formulas name must be there."""
    nets, names = {"gnd", *circuit.nets}, {part.name for part in circuit.parts}
    if len(names) != len(circuit.parts):
        double = sorted(
            part.name for part in circuit.parts if sum(other.name == part.name for other in circuit.parts) > 1
        )
        raise CircuitError("duplicate-part", f"two parts are called `{double[0]}`", circuit.parts[-1].span)
    for part in circuit.parts:
        for field_name, value in part.fields.items():
            if field_name == "control" and isinstance(value, str) and value not in nets:
                raise CircuitError("unknown-net", f"`{part.name}`: there is no net `{value}`", part.span)
            for tree in trees(value):
                for reference in references(tree):
                    if isinstance(reference, NetRef) and reference.name not in nets:
                        raise CircuitError(
                            "unknown-net", f"`{part.name}`: there is no net `{reference.name}`", part.span
                        )
                    if isinstance(reference, CurrentRef) and reference.part not in names:
                        raise CircuitError(
                            "unknown-part", f"`{part.name}`: there is no part `{reference.part}`", part.span
                        )
                for name in curve_names(tree):
                    if name not in circuit.curves:
                        raise CircuitError(
                            "unknown-curve", f"`{part.name}`: there is no curve `{name}`", part.span
                        )


def currents_read(contributions: Sequence[Contribution]) -> set[str]:
    """Parts whose current some formula reads."""
    return {
        branch.first[1]
        for contribution in contributions
        for branch in contribution.branches
        if branch.way == "sense" and isinstance(branch.first, tuple) and branch.first[0] == "current"
    }


def lacks_current(entry: PartPlan, contribution: Contribution) -> bool:
    """Whether a part whose current is read has none among its unknowns; CircuitError `unknown-current` where it can have none."""
    if any(unknown.name == "current" for unknown in contribution.unknowns):
        return False
    if entry.device.pins == ("from", "to"):
        return True
    raise CircuitError(
        "unknown-current",
        f"`{entry.part.name}` has more than two pins, so it has no one current",
        entry.part.span,
        "put a part with two pins in series and read its current",
    )


def all_roots(entry: PartPlan, parameters: ParameterPlan, circuit: Circuit) -> frozenset[str]:
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
        given[name] = field_value(part, entry.specs[name], value, values, curves)
    return entry.device(**given)


def part_contribution(
    entry: PartPlan, values: Mapping[str, Scalar], curves: Mapping[str, Curve]
) -> Contribution:
    """What a part adds to the equations at some values; mistakes get its name and place."""
    try:
        contribution = device_of(entry, values, curves).contribution(values[AMBIENT])
    except CircuitError as fault:
        if fault.span is not None or f"`{entry.part.name}" in fault.message:
            raise
        raise CircuitError(
            fault.code, f"`{entry.part.name}`: {fault.message}", entry.part.span, fault.hint
        ) from None
    return with_current(contribution) if entry.split else contribution


def resolve(part: Part, symbol: Symbol) -> Key:
    """The unknown that a symbol of a part's contribution stands for; gnd is the key ("net", "gnd")."""
    if isinstance(symbol, tuple):
        return symbol
    if symbol in part.pins:
        return ("net", part.pins[symbol])
    return ("current", part.name) if symbol == "current" else ("internal", f"{part.name}.{symbol}")


def coupling_plan(coupling: Coupling, circuit: Circuit, parameters: ParameterPlan) -> CouplingPlan:
    """CircuitError `unknown-inductor` where it names what is no inductor, or one twice."""
    found = []
    for name in (coupling.first, coupling.second):
        position = next((j for j, part in enumerate(circuit.parts) if part.name == name), None)
        if position is None or circuit.parts[position].device != "inductor":
            raise CircuitError("unknown-inductor", f"`{name}` is no inductor of this circuit", coupling.span)
        found.append(position)
    if found[0] == found[1]:
        raise CircuitError(
            "unknown-inductor", f"`{coupling.first}` cannot be coupled to itself", coupling.span
        )
    names = names_in(coupling.coefficient, circuit.curves)
    for position in found:
        names |= names_in(_inductance(circuit.parts[position]), circuit.curves)
    for name in names:
        if name not in parameters.formulas:
            raise unknown_let(name, parameters.formulas, coupling.span)
    roots = frozenset().union(*(parameters.roots[name] for name in names)) if names else frozenset()
    return CouplingPlan(coupling, (circuit.parts[found[0]], circuit.parts[found[1]]), roots)


def _inductance(part: Part) -> Expression:
    value = part.fields["inductance"]
    assert not isinstance(value, str | Curve | Waveform)
    return value


def coupling_slots(entry: CouplingPlan, values: Mapping[str, Scalar], curves: Mapping[str, Curve]) -> Values:
    """M = k sqrt(L1 L2), which each branch law takes from the other current."""
    coupling = entry.coupling
    what = f"the coupling of `{coupling.first}` and `{coupling.second}`"
    k = in_range(
        number(coupling.coefficient, values, curves, what, coupling.span), _COEFFICIENT, what, coupling.span
    )
    product = 1.0
    for part in entry.inductors:
        product = product * number(_inductance(part), values, curves, f"`{part.name}`", part.span)
    mutual = k * np.sqrt(product)
    return {**{name: [] for name in ARRAYS}, "C": [mutual, mutual]}


def coupling_places(entry: CouplingPlan, index: Mapping[Key, int]) -> dict[str, list[int]]:
    """Where its two entries of C stand."""
    n = len(index)
    one, two = (index["current", part.name] for part in entry.inductors)
    return {**{name: [] for name in ARRAYS}, "C": [one * n + two, two * n + one]}
