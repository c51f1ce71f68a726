"""What the parser hands to the builder: statements and formulas as written, with their places; nothing is looked up yet.

`depth` of a formula: see `depth_of`. The parser holds it down, so that whatever walks a formula may recurse.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

from loopsim.units import Quantity


@dataclass(frozen=True, slots=True)
class Place:
    """From line, column up to end_line, end_column (from 1; the end is one past the last character)."""

    line: int
    column: int
    end_line: int
    end_column: int

    def to(self, other: Place) -> Place:
        """From the start of this to the end of the other."""
        return Place(self.line, self.column, other.end_line, other.end_column)


@dataclass(frozen=True, slots=True)
class Num:
    """A number with its unit."""

    quantity: Quantity
    place: Place
    percent: bool = False


@dataclass(frozen=True, slots=True)
class Word:
    """A name used in a formula."""

    text: str
    place: Place


@dataclass(frozen=True, slots=True)
class Field:
    """name = value in a call."""

    name: Word
    value: Toleranced


@dataclass(frozen=True, slots=True)
class Positional:
    """A value in a call, or a pair x: y."""

    value: Formula
    pair: Formula | None = None


@dataclass(frozen=True, slots=True)
class Call:
    """name(arguments)."""

    name: Word
    fields: tuple[Field, ...]
    positional: tuple[Positional, ...]
    place: Place
    depth: int = 1


@dataclass(frozen=True, slots=True)
class Chain:
    """first op second op ...: a sum (+ and -) or a product (* and /), flat. place: of the whole."""

    operators: tuple[str, ...]
    operands: tuple[Formula, ...]
    place: Place
    depth: int = 1


@dataclass(frozen=True, slots=True)
class Power:
    """base ^ exponent."""

    base: Formula
    exponent: Formula
    place: Place
    depth: int = 1


@dataclass(frozen=True, slots=True)
class Negative:
    """-operand."""

    operand: Formula
    place: Place
    depth: int = 1


Formula: TypeAlias = Num | Word | Call | Chain | Power | Negative


@dataclass(frozen=True, slots=True)
class Toleranced:
    """value, or value +/- tolerance."""

    value: Formula
    tolerance: Formula | None = None


@dataclass(frozen=True, slots=True)
class Head:
    """circuit NAME "title"."""

    name: Word
    title: str


@dataclass(frozen=True, slots=True)
class Use:
    """use "path"."""

    path: str
    place: Place


@dataclass(frozen=True, slots=True)
class Let:
    """let NAME = value [in low .. high]."""

    name: Word
    value: Toleranced
    low: Formula | None
    high: Formula | None


@dataclass(frozen=True, slots=True)
class KindOf:
    """kind NAME = BASE(...)."""

    name: Word
    call: Call


@dataclass(frozen=True, slots=True)
class CurveOf:
    """curve NAME = polynomial(...) or points(...)."""

    name: Word
    call: Call


@dataclass(frozen=True, slots=True)
class Block:
    """block NAME(pins; defaults) { body }."""

    name: Word
    pins: tuple[Word, ...]
    defaults: tuple[Field, ...]
    body: tuple[Statement, ...]


@dataclass(frozen=True, slots=True)
class Couple:
    """couple FIRST, SECOND: coefficient."""

    first: Word
    second: Word
    coefficient: Formula


@dataclass(frozen=True, slots=True)
class PartOf:
    """name: KIND(pin = net, ...)."""

    name: Word
    call: Call


@dataclass(frozen=True, slots=True)
class Step:
    """One part of a chain: before, after are the links `--` or `->` on its two sides."""

    before: str
    before_place: Place
    name: Word
    value: Toleranced
    after: str
    after_place: Place
    net: Word


@dataclass(frozen=True, slots=True)
class Path:
    """net -- part -- net -- ..."""

    start: Word
    steps: tuple[Step, ...]


@dataclass(frozen=True, slots=True)
class Relation:
    """form: equal, set, within, below, above; items: toleranced values, or (low, high) for within."""

    form: str
    items: tuple[Toleranced, ...]
    place: Place


@dataclass(frozen=True, slots=True)
class Binding:
    """LET = value, value, ..."""

    name: Word
    values: tuple[Formula, ...]


@dataclass(frozen=True, slots=True)
class Expect:
    """One requirement as written."""

    label: Word | None
    words: tuple[Word, ...]
    target: Formula | None
    along: Word | None
    stable: bool
    relation: Relation
    at: tuple[tuple[Formula, tuple[Formula, ...] | None], ...]
    start: Word | None
    over: bool
    place: Place


Statement: TypeAlias = Head | Use | Let | KindOf | CurveOf | Block | Couple | PartOf | Path | Expect


def depth_of(formula: Formula) -> int:
    """How many operations stand within each other; in a sum or product, each operator stands within the next."""
    return formula.depth if isinstance(formula, Call | Chain | Power | Negative) else 0
