"""What one device adds to C x' + G x + B psi(W x + c) = s, as plain data in the names of its pins and of its own unknowns.

Signs: the row of a net is the sum of currents that leave it, so a current i through a part from pin `a` to pin `b` adds +i
to row a and -i to row b; `source` and `supply` are what stands on the right-hand side. The row of an own unknown is its law.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, TypeAlias

from loopsim.devices.fields import Scalar
from loopsim.devices.phi import Kind

# a pin or an own unknown by its local name; ("net", name) or ("current", part) for what lies outside the device
Symbol: TypeAlias = str | tuple[str, str]
Entry: TypeAlias = tuple[Symbol, Symbol, Scalar]  # row, column, value
Share: TypeAlias = tuple[Symbol, Scalar]  # a coefficient at an unknown, or a value in a row

GROUND: Symbol = ("net", "gnd")


@dataclass(frozen=True, slots=True)
class Unknown:
    """An own unknown and the row of its law. name: `current` for the current through the part along its chain [A], else what it
    is; row_unit: "A" for a balance of currents, "V" for a branch law, "1" otherwise."""

    name: str
    row_unit: str


@dataclass(frozen=True, slots=True)
class Term:
    """One nonlinear row: phi_kind(sum control + offset) * (sum factor + factor_offset), entered into rows with the outputs'
    weights."""

    kind: Kind
    control: tuple[Share, ...]
    outputs: tuple[Share, ...]
    offset: Scalar = 0.0
    factor: tuple[Share, ...] = ()
    factor_offset: Scalar = 1.0
    parameters: tuple[Scalar, ...] = ()


@dataclass(frozen=True, slots=True)
class Timed:
    """A waveform (loopsim.devices.sources) on the right-hand side of some rows, beside its value at time 0 in `supply`."""

    outputs: tuple[Share, ...]
    waveform: Any


@dataclass(frozen=True, slots=True)
class Branch:
    """How two points are joined at DC, for the structure findings.

    way: "conductance" (current follows voltage), "voltage" (the voltage between them is prescribed), "current" (the current is
    prescribed), "capacitance" (open at DC), "sense" (`first` is only looked at). controlled: a prescribed value that depends
    on others.
    """

    first: Symbol
    second: Symbol
    way: str
    controlled: bool = False


@dataclass(frozen=True, slots=True)
class Contribution:
    """unknowns: own ones; conductance, capacitance: entries of G and C; source: shares of s that belong to the device itself;
    supply: shares of s that an independent source puts in (they count in s too); terms; timed; branches."""

    unknowns: tuple[Unknown, ...] = ()
    conductance: tuple[Entry, ...] = ()
    capacitance: tuple[Entry, ...] = ()
    source: tuple[Share, ...] = ()
    supply: tuple[Share, ...] = ()
    terms: tuple[Term, ...] = ()
    timed: tuple[Timed, ...] = ()
    branches: tuple[Branch, ...] = ()


def across(a: Symbol, b: Symbol, value: Scalar) -> tuple[Entry, ...]:
    """Entries of a conductance [S] or capacitance [F] between two points."""
    return ((a, a, value), (a, b, -value), (b, a, -value), (b, b, value))


def through(a: Symbol, b: Symbol, weight: Scalar = 1.0) -> tuple[Share, ...]:
    """Shares of a current that flows from a to b: it leaves a and arrives at b."""
    return ((a, weight), (b, -weight))


def difference(a: Symbol, b: Symbol, scale: Scalar = 1.0) -> tuple[Share, ...]:
    """scale * (v_a - v_b) as coefficients."""
    return ((a, scale), (b, -scale))


def branch_entries(first: Symbol, second: Symbol) -> tuple[Entry, ...]:
    """A branch current from `first` to `second` and the difference v_second - v_first in the row of its law.

    The two are minus each other's transpose, so that a passive circuit has a positive determinant.
    """
    return (
        (first, "current", 1.0),
        (second, "current", -1.0),
        ("current", first, -1.0),
        ("current", second, 1.0),
    )


def with_current(part: Contribution) -> Contribution:
    """The same two-terminal part with its current as an unknown: `current` stands in the balances, and all that entered the
    row of `from` makes up the law of `current`. Needed where a formula reads the current of a part that has none."""

    def moved(row: Symbol) -> Symbol | None:
        return {"from": "current", "to": None}.get(row, row) if isinstance(row, str) else row

    def entries(given: tuple[Entry, ...]) -> tuple[Entry, ...]:
        return tuple(
            (target, column, value) for row, column, value in given if (target := moved(row)) is not None
        )

    def shares(given: tuple[Share, ...]) -> tuple[Share, ...]:
        return tuple((target, value) for row, value in given if (target := moved(row)) is not None)

    own: tuple[Entry, ...] = (("from", "current", 1.0), ("to", "current", -1.0), ("current", "current", -1.0))
    return replace(
        part,
        unknowns=(Unknown("current", "A"), *part.unknowns),
        conductance=(*entries(part.conductance), *own),
        capacitance=entries(part.capacitance),
        source=shares(part.source),
        supply=shares(part.supply),
        terms=tuple(replace(term, outputs=shares(term.outputs)) for term in part.terms),
        timed=tuple(replace(timed, outputs=shares(timed.outputs)) for timed in part.timed),
    )
