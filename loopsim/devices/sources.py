"""Independent and controlled sources, pins `from` and `to`.

A voltage source lifts `to` above `from` by its value; a current source drives its value from `from` through itself to `to`.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, TypeAlias

from loopsim.devices.contribution import (
    GROUND,
    Branch,
    Contribution,
    Entry,
    Share,
    Term,
    Timed,
    Unknown,
    branch_entries,
    through,
)
from loopsim.devices.fields import Scalar, named, needed
from loopsim.devices.formula import Sum
from loopsim.devices.passive import TWO
from loopsim.devices.waveforms import LARGEST, Points, Ramp, Sine, Square

Value: TypeAlias = Scalar | Sine | Square | Ramp | Points


def _put_in(value: Value, rows: tuple[Share, ...]) -> tuple[tuple[Share, ...], tuple[Timed, ...]]:
    """Shares of a source's DC value in some rows, and its course in time where it is a waveform."""
    if isinstance(value, Sine | Square | Ramp | Points):
        at_start = value.value(0.0)
        return tuple((row, weight * at_start) for row, weight in rows), (Timed(rows, value),)
    return tuple((row, weight * value) for row, weight in rows), ()


@dataclass(frozen=True)
class VoltageSource:
    """v_to - v_from = voltage, whatever the current. At DC a waveform has its value at time 0."""

    pins: ClassVar[tuple[str, ...]] = TWO
    polarised: ClassVar[bool] = True

    voltage: Value = needed("V", -LARGEST, LARGEST, "how far `to` is lifted above `from`", form="source")

    def contribution(self, ambient: Scalar) -> Contribution:
        supply, timed = _put_in(self.voltage, (("current", 1.0),))
        return Contribution(
            unknowns=(Unknown("current", "V"),),
            conductance=branch_entries("from", "to"),
            supply=supply,
            timed=timed,
            branches=(Branch("from", "to", "voltage"),),
        )


@dataclass(frozen=True)
class CurrentSource:
    """i = current, from `from` to `to`, whatever the voltage. At DC a waveform has its value at time 0."""

    pins: ClassVar[tuple[str, ...]] = TWO
    polarised: ClassVar[bool] = True

    current: Value = needed(
        "A", -LARGEST, LARGEST, "current through the source along its arrow", form="source"
    )

    def contribution(self, ambient: Scalar) -> Contribution:
        supply, timed = _put_in(self.current, through("from", "to", -1.0))
        return Contribution(supply=supply, timed=timed, branches=(Branch("from", "to", "current"),))


def _enter(formula: Sum, rows: tuple[Share, ...]) -> Contribution:
    """formula, with its weight in each row, on the left-hand side. A saturating term inside another becomes an unknown of
    its own."""
    conductance: list[Entry] = []
    source: list[Share] = []
    terms: list[Term] = []
    unknowns: list[Unknown] = []

    def enter(total: Sum, targets: tuple[Share, ...]) -> None:
        if not (isinstance(total.constant, float) and total.constant == 0.0):
            source.extend((row, -(weight * total.constant)) for row, weight in targets)
        for column, coefficient in total.coefficients.items():
            conductance.extend((row, column, weight * coefficient) for row, weight in targets)
        for term in total.terms:
            control: list[Share] = list(term.control.coefficients.items())
            if term.control.terms:
                name = f"term_{len(unknowns) + 1}"
                unknowns.append(Unknown(name, "1"))
                inner = Sum(0.0, {}, term.control.terms)
                conductance.append((name, name, 1.0))
                enter(inner, ((name, -1.0),))
                control.append((name, 1.0))
            outputs = tuple((row, weight * term.scale) for row, weight in targets)
            terms.append(
                Term(term.kind, tuple(control), outputs, term.control.constant, parameters=term.parameters)
            )

    enter(formula, rows)
    return Contribution(
        unknowns=tuple(unknowns), conductance=tuple(conductance), source=tuple(source), terms=tuple(terms),
        branches=tuple(Branch(symbol, GROUND, "sense") for symbol in _looked_at(formula)),
    )  # fmt: skip


def _looked_at(formula: Sum) -> tuple[tuple[str, str], ...]:
    """Every net and current that a formula reads."""
    found = dict.fromkeys(formula.coefficients)
    for term in formula.terms:
        found.update(dict.fromkeys(_looked_at(term.control)))
    return tuple(found)


@dataclass(frozen=True)
class ControlledVoltageSource:
    """v_to - v_from = formula: a constant, constants times net voltages and part currents, and limit, tanh, atan or curve
    terms."""

    pins: ClassVar[tuple[str, ...]] = TWO
    polarised: ClassVar[bool] = True

    formula: Sum = named("formula", "how far `to` is lifted above `from`", "V")

    def contribution(self, ambient: Scalar) -> Contribution:
        found = _enter(self.formula, (("current", -1.0),))
        return Contribution(
            unknowns=(Unknown("current", "V"), *found.unknowns),
            conductance=(*branch_entries("from", "to"), *found.conductance),
            source=found.source,
            terms=found.terms,
            branches=(Branch("from", "to", "voltage", bool(found.branches)), *found.branches),
        )


@dataclass(frozen=True)
class ControlledCurrentSource:
    """i = formula, from `from` to `to`; the formula as in a controlled voltage source."""

    pins: ClassVar[tuple[str, ...]] = TWO
    polarised: ClassVar[bool] = True

    formula: Sum = named("formula", "current through the source along its arrow", "A")

    def contribution(self, ambient: Scalar) -> Contribution:
        found = _enter(self.formula, through("from", "to"))
        return Contribution(
            unknowns=found.unknowns,
            conductance=found.conductance,
            source=found.source,
            terms=found.terms,
            branches=(Branch("from", "to", "current", bool(found.branches)), *found.branches),
        )
