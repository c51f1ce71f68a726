"""The circuit while it is being built, and the level of blocks at which a statement stands."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

from loopsim.circuit import Coupling, Curve, FieldValue, Parameter, Part, Requirement, Tolerance
from loopsim.expressions import Expression, LetRef, evaluate
from loopsim.language import tree as t
from loopsim.language.definitions import Definitions
from loopsim.language.formulas import Scope, Typed
from loopsim.units import name_of

MAX_PARTS = 50_000  # parts after expansion; a file that names more is a mistake or an attack


@dataclass
class Draft:
    """Everything found so far, by full name (`block.part`). numbers: the nominal value of every parameter [SI]."""

    parameters: dict[str, Parameter] = field(default_factory=dict)
    numbers: dict[str, float] = field(default_factory=dict)
    nets: dict[str, None] = field(default_factory=dict)
    parts: dict[str, Part] = field(default_factory=dict)
    couplings: list[Coupling] = field(default_factory=list)
    requirements: list[Requirement] = field(default_factory=list)
    curves: dict[str, Curve] = field(default_factory=dict)

    def number(self, tree: Expression, formula: t.Formula, scope: Scope) -> float:
        """The nominal value of a formula without nets [SI]; CircuitError `formula-value` where it has none."""
        clip = {"limit": lambda x, low, high: min(max(x, low), high), "curve": lambda *_: 0.0}
        try:
            value = float(evaluate(tree, self.numbers, operations=clip))
        except (ZeroDivisionError, OverflowError, ValueError, FloatingPointError):
            value = math.nan
        if not math.isfinite(value):
            raise scope.mistake("formula-value", "this formula has no finite value", formula.place)
        return value

    def spread(self, full: str, value: Typed, tolerance: Tolerance, formula: t.Formula, scope: Scope) -> Typed:
        """A value with a tolerance becomes a parameter of that name; the answer refers to it."""
        self.numbers[full] = self.number(value.tree, formula, scope)
        unit = value.scale or name_of(value.dimension)
        span = scope.source.span(formula.place)
        self.parameters[full] = Parameter(full, value.tree, unit, None, None, tolerance, span)
        return Typed(LetRef(full), value.dimension, value.scale)


@dataclass
class Frame:
    """One level of expansion: the file's definitions, the prefix of names, what names mean. trail: the blocks around it."""

    draft: Draft
    definitions: Definitions
    prefix: str
    scope: Scope
    pins: Mapping[str, str] = field(default_factory=dict)
    trail: tuple[str, ...] = ()

    def net(self, word: t.Word) -> str:
        """Full name of a net as written here; the circuit gets it."""
        name = word.text
        if name == "gnd":
            return "gnd"
        if name in self.scope.values:
            raise self.scope.mistake(
                "name-clash", f"`{name}` is a let; nets and lets share one name space", word.place
            )
        full = self.pins.get(name, self.prefix + name)
        if full != "gnd":
            self.draft.nets.setdefault(full)
        return full

    def new_part(self, word: t.Word) -> str:
        """Full name of a part (or an instance) that stands here for the first time."""
        if "." in word.text:
            raise self.scope.mistake("reserved-name", "a part's own name has no point in it", word.place)
        full = self.prefix + word.text
        if full in self.draft.parts:
            raise self.scope.mistake(
                "duplicate-part",
                f"the part `{full}` is already there",
                word.place,
                f"first at {self.draft.parts[full].span}",
            )
        return full

    def add(
        self, name: str, device: str, pins: Mapping[str, str], fields: Mapping[str, FieldValue], where: t.Place
    ) -> None:
        """One part more in the circuit. name: full; pins: pin to full name of its net."""
        parts = self.draft.parts
        if len(parts) >= MAX_PARTS:
            raise self.scope.mistake(
                "too-many-parts", f"more than {MAX_PARTS:,} parts after the blocks are expanded", where
            )
        parts[name] = Part(name, device, dict(pins), dict(fields), self.scope.source.span(where))
