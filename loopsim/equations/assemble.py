"""A circuit and settings to the arrays that every analysis reads."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.circuit import Circuit
from loopsim.devices.contribution import Contribution, Symbol
from loopsim.devices.fields import Scalar
from loopsim.devices.phi import VALUE
from loopsim.equations.parameters import number, unknown_let
from loopsim.equations.parts import PartPlan, part_contribution, resolve
from loopsim.equations.plan import Plan, plan
from loopsim.equations.system import System
from loopsim.equations.traced import AFFINE
from loopsim.errors import CircuitError

Array: TypeAlias = NDArray[np.float64]


def assemble(circuit: Circuit, settings: Mapping[str, Any] | None = None) -> System:
    """The system of a circuit; settings: parameter name to SI value (degC for `ambient`) or to a (batch,) array of them.

    Lets that depend on a set one follow it. Arrays that the settings do not move have no batch axis and are shared with
    other systems of the same circuit: they are read-only. CircuitError for what is wrong with the circuit, `unknown-let` for
    a name it has not.
    """
    return plan(circuit).assemble(settings or {})


def parameter_values(circuit: Circuit, settings: Mapping[str, Any] | None = None) -> dict[str, Scalar]:
    """Every let and every toleranced value [SI; degC for `ambient`], the set ones as set and those that depend on them
    accordingly."""
    return plan(circuit).values(settings or {})


def let_range(
    circuit: Circuit, let: str, settings: Mapping[str, Any] | None = None
) -> tuple[float, float] | None:
    """The range a let is traced over (`in LO .. HI`) [SI; degC for `ambient`], None where none is stated.

    Its ends may be formulas of other lets, taken at `settings`. CircuitError `let-range` where the first end is not below
    the second.
    """
    parameter = _known(circuit, let).parameters.formulas[let]
    if parameter.low is None or parameter.high is None:
        return None
    values = parameter_values(circuit, settings)
    low, high = (
        float(number(end, values, circuit.curves, f"the range of `{let}`", parameter.span))
        for end in (parameter.low, parameter.high)
    )
    if not low < high:
        raise CircuitError(
            "let-range", f"the range of `{let}` begins at {low:g} and ends at {high:g}", parameter.span
        )
    return low, high


def tolerance_limits(
    circuit: Circuit, settings: Mapping[str, Any] | None = None
) -> dict[str, tuple[float, float]]:
    """Smallest and largest value of every toleranced quantity [SI] whose nominal value `settings` does not replace."""
    found, given = plan(circuit), settings or {}
    values = found.values(given)
    return {
        name: parameter.tolerance.limits(float(values[name]))
        for name, parameter in found.parameters.formulas.items()
        if parameter.tolerance is not None and name not in given
    }


def dependence(circuit: Circuit, let: str) -> frozenset[str]:
    """Names of the System's arrays that move with a let: some of C G B W c V d s supply parameters timed. Found from the
    formulas and the devices' laws, not by trying values: what is not named never moves."""
    return frozenset(name for name, roots in _known(circuit, let).traced.items() if let in roots)


def is_affine(circuit: Circuit, let: str) -> bool:
    """Whether the let moves nothing but s (and supply), and those in a straight line: then s(let) follows from its values at
    two lets."""
    traced = _known(circuit, let).traced
    return all(
        let not in roots or (name in ("s", "supply") and roots[let] == AFFINE)
        for name, roots in traced.items()
    )


def _known(circuit: Circuit, let: str) -> Plan:
    found = plan(circuit)
    if let not in found.parameters.formulas:
        raise unknown_let(let, found.parameters.formulas)
    return found


def pin_currents(circuit: Circuit, x: Array, settings: Mapping[str, Any] | None = None) -> dict[str, Scalar]:
    """Currents at rest [A]: `part` through each part with two pins, along its chain; `part.pin` into each pin of the others.

    x: (n,) or (batch, n), the unknowns of `assemble(circuit, settings)`; values are floats or arrays (batch,).
    """
    laid_out = plan(circuit)
    values = laid_out.values(settings or {})
    found: dict[str, Scalar] = {}
    for entry in laid_out.parts:
        contribution = part_contribution(entry, values, circuit.curves)
        psi = _outputs(entry, contribution, laid_out, x)
        pins = entry.device.pins
        for pin in ("from",) if pins == ("from", "to") else pins:
            name = entry.part.name if pin == "from" else f"{entry.part.name}.{pin}"
            current = _into(pin, entry, contribution, laid_out, x, psi)
            found[name] = float(current) if np.ndim(current) == 0 else current
    return found


def _at(symbol: Symbol, entry: PartPlan, laid_out: Plan, x: Array) -> Scalar:
    position = laid_out.index.get(resolve(entry.part, symbol))
    return 0.0 if position is None else x[..., position]


def _outputs(entry: PartPlan, contribution: Contribution, laid_out: Plan, x: Array) -> list[Scalar]:
    """psi of each nonlinear row of a part."""
    found = []
    for term in contribution.terms:
        w = term.offset + sum(value * _at(symbol, entry, laid_out, x) for symbol, value in term.control)
        u = term.factor_offset + sum(value * _at(symbol, entry, laid_out, x) for symbol, value in term.factor)
        found.append(VALUE[term.kind](w, term.parameters) * u)
    return found


def _into(
    pin: str, entry: PartPlan, given: Contribution, laid_out: Plan, x: Array, psi: list[Scalar]
) -> Scalar:
    """What the part takes out of the balance at one of its pins."""
    total: Scalar = 0.0
    for row, column, value in given.conductance:
        if row == pin:
            total = total + value * _at(column, entry, laid_out, x)
    for row, value in (*given.source, *given.supply):
        if row == pin:
            total = total - value
    for term, output in zip(given.terms, psi, strict=True):
        for row, weight in term.outputs:
            if row == pin:
                total = total + weight * output
    return total
