"""The circuit while it is being built, and the level of blocks at which a statement stands."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from loopsim.circuit import Coupling, Curve, FieldValue, Parameter, Part, Requirement, Tolerance
from loopsim.devices.curves import CurveValues, points_curve, polynomial_curve
from loopsim.devices.phi import VALUE
from loopsim.errors import Span
from loopsim.expressions import Expression, LetRef, Operation, evaluate
from loopsim.language import tree as t
from loopsim.language.definitions import Definitions
from loopsim.language.formulas import Scope, Typed
from loopsim.language.numbers import nominal
from loopsim.units import name_of

MAX_SIZE = 50_000  # parts, blocks and lets after expansion; a file that asks for more is a mistake or an attack


@dataclass
class Draft:
    """Everything found so far, by full name (`block.part`).

    known_curves: all that the file defines or uses; curves: those that are used; numbers: the nominal value of every parameter [SI];
    instances: of blocks, with their places; named_outside: nets of blocks that statements outside of them name (`block.net`).
    """

    known_curves: Mapping[str, Curve]
    parameters: dict[str, Parameter] = field(default_factory=dict)
    numbers: dict[str, float] = field(default_factory=dict)
    nets: dict[str, None] = field(default_factory=dict)
    parts: dict[str, Part] = field(default_factory=dict)
    couplings: list[Coupling] = field(default_factory=list)
    requirements: list[Requirement] = field(default_factory=list)
    curves: dict[str, Curve] = field(default_factory=dict)
    instances: dict[str, Span] = field(default_factory=dict)
    named_outside: dict[str, tuple[t.Word, Scope]] = field(default_factory=dict)
    size: int = 0

    def count(self, where: t.Place, scope: Scope) -> None:
        """One part, block or let more; few lines can ask for very many."""
        self.size += 1
        if self.size > MAX_SIZE:
            raise scope.mistake(
                "too-many-parts", f"more than {MAX_SIZE:,} parts, blocks and lets after the blocks are expanded", where
            )

    def number(self, tree: Expression, formula: t.Formula, scope: Scope) -> float:
        """The nominal value of a formula without nets [SI]; CircuitError `formula-value` where it has none."""
        for name in curves_in(tree):
            self.curves[name] = self.known_curves[name]
        return nominal(tree, formula, scope, self.numbers, self._apply)

    def curve_values(self, name: str) -> CurveValues:
        """A curve with its numbers put in."""
        curve = self.known_curves[name]
        values = [float(evaluate(value, self.numbers)) for value in curve.values]
        return polynomial_curve(values) if curve.form == "polynomial" else points_curve(values)

    def _apply(self, name: str, x: float) -> float:
        found = self.curve_values(name)
        return float(VALUE[found.kind](x, found.parameters))

    def name_value(
        self, full: str, value: Typed, tolerance: Tolerance | None, formula: t.Formula, scope: Scope
    ) -> Typed:
        """A value becomes a parameter of that name; the answer refers to it."""
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
        if "." in name and name not in self.pins:
            self.draft.named_outside.setdefault(full, (word, self.scope))
        elif full != "gnd":
            self.draft.nets.setdefault(full)
        return full

    def new_part(self, word: t.Word) -> str:
        """Full name of a part (or an instance) that stands here for the first time."""
        if "." in word.text:
            raise self.scope.mistake("reserved-name", "a part's own name has no point in it", word.place)
        full, draft = self.prefix + word.text, self.draft
        there = draft.instances.get(full) or (draft.parts[full].span if full in draft.parts else None)
        if there is not None:
            raise self.scope.mistake(
                "duplicate-part", f"the part `{full}` is already there", word.place, f"first at {there}"
            )
        draft.count(word.place, self.scope)
        return full

    def add(
        self, name: str, device: str, pins: Mapping[str, str], fields: Mapping[str, FieldValue], where: t.Place
    ) -> None:
        """One part more in the circuit. name: full; pins: pin to full name of its net."""
        self.draft.parts[name] = Part(name, device, dict(pins), dict(fields), self.scope.source.span(where))


def curves_in(tree: Expression) -> list[str]:
    """Names of the curves that a formula applies."""
    found = []
    stack = [tree]
    while stack:
        node = stack.pop()
        if isinstance(node, Operation):
            if node.name == "curve":
                found.append(node.curve)
            stack.extend(node.arguments)
    return found
