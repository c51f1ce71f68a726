"""Formulas as written to checked SI trees: every name is looked up, every dimension compared, with the caret at the operand at fault."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

from loopsim.errors import CircuitError
from loopsim.expressions import CurrentRef, Expression, LetRef, NetRef, Number, Operation
from loopsim.language import tree as t
from loopsim.language.mistakes import nearest
from loopsim.language.source import Source
from loopsim.units import AMPERE, KELVIN, NUMBER, UNIT_PATTERN, VOLT, Dimension, name_of

UNIT_HINT = "a unit stands behind its number, without a blank inside: 3 V/us"
FUNCTIONS = ("sqrt", "ln", "exp", "abs", "min", "max", "tanh", "atan", "limit", "current")


@dataclass(frozen=True, slots=True)
class Typed:
    """A tree with its dimension; scale "degC" marks a plain temperature in degrees Celsius."""

    tree: Expression
    dimension: Dimension
    scale: str = ""


@dataclass
class Scope:
    """What names mean in one place. values: lets and block parameters; nets, parts, instances (of blocks): inner name to full
    name; curves: name to (input, output) dimension."""

    source: Source
    values: dict[str, Typed] = field(default_factory=dict)
    nets: Mapping[str, str] = field(default_factory=dict)
    parts: Mapping[str, str] = field(default_factory=dict)
    curves: Mapping[str, tuple[Dimension, Dimension]] = field(default_factory=dict)
    instances: Mapping[str, str] = field(default_factory=dict)

    def net(self, text: str) -> str | None:
        """Full name of a net that a formula names: one of this place, or `instance.net` of a block placed here."""
        return self.nets.get(text) or self._inside(text)

    def part(self, text: str) -> str | None:
        """Full name of a part that a formula names, likewise."""
        return self.parts.get(text) or self._inside(text)

    def _inside(self, text: str) -> str | None:
        # whether the block holds it shows when it is expanded
        instance, point, inner = text.partition(".")
        return f"{self.instances[instance]}.{inner}" if point and instance in self.instances else None

    def mistake(self, code: str, message: str, where: t.Place, hint: str = "") -> CircuitError:
        """An error at a place of this scope's text."""
        return CircuitError(code, message, self.source.span(where), hint)


def in_words(dimension: Dimension) -> str:
    """A dimension for a message."""
    return f"`{name_of(dimension)}`" if dimension != NUMBER else "a pure number"


def typed(formula: t.Formula, scope: Scope) -> Typed:
    """A formula with all names looked up; CircuitError `dimension`, `unknown-name`, ... at the operand at fault."""
    match formula:
        case t.Num(quantity, _, _):
            return Typed(Number(quantity.value), quantity.dimension, quantity.scale)
        case t.Word(text, where):
            return _named(text, where, scope)
        case t.Negative(operand, _):
            inner = _plain(operand, scope) if not isinstance(operand, t.Num) else typed(operand, scope)
            if isinstance(inner.tree, Number):
                return Typed(Number(-inner.tree.value), inner.dimension, inner.scale)
            return Typed(Operation("negative", (inner.tree,)), inner.dimension)
        case t.Chain():
            return _chain(formula, scope)
        case t.Power(base, exponent, where):
            return _power(base, exponent, where, scope)
        case t.Call():
            return _call(formula, scope)
    raise AssertionError(formula)


def _named(text: str, where: t.Place, scope: Scope) -> Typed:
    if text in scope.values:
        return scope.values[text]
    if text == "gnd":
        return Typed(NetRef("gnd"), VOLT)
    net = scope.net(text)
    if net is not None:
        return Typed(NetRef(net), VOLT)
    known: Iterable[str] = [*scope.values, *scope.nets, *scope.curves, *FUNCTIONS]
    if text in scope.curves:
        raise scope.mistake(
            "unknown-name", f"`{text}` is a curve; it needs an argument here", where, f"write {text}(...)"
        )
    hint = nearest(text, known) or (UNIT_HINT if re.fullmatch(UNIT_PATTERN, text) else "")
    raise scope.mistake("unknown-name", f"there is no net or let `{text}`", where, hint)


def _plain(formula: t.Formula, scope: Scope) -> Typed:
    """Not a temperature in degrees Celsius, which stands alone."""
    found = typed(formula, scope)
    if found.scale:
        raise scope.mistake(
            "degrees",
            "a temperature in degC stands alone; it takes no part in a formula",
            formula.place,
            "use K for a difference",
        )
    return found


def _chain(formula: t.Chain, scope: Scope) -> Typed:
    parts = [_plain(operand, scope) for operand in formula.operands]
    total = parts[0]
    for operator, part, operand in zip(formula.operators, parts[1:], formula.operands[1:], strict=True):
        if operator in "+-":
            if part.dimension != total.dimension:
                word, preposition = ("add", "to") if operator == "+" else ("subtract", "from")
                raise scope.mistake(
                    "dimension", f"cannot {word} {in_words(part.dimension)} {preposition} {in_words(total.dimension)}",
                    operand.place, "a tolerance is written +/- 1 %" if _is_share(operand) else "",
                )  # fmt: skip
            dimension = total.dimension
        else:
            sign = 1 if operator == "*" else -1
            a, b = total.dimension, part.dimension
            dimension = (a[0] + sign * b[0], a[1] + sign * b[1], a[2] + sign * b[2], a[3] + sign * b[3])
            if operator == "/" and isinstance(part.tree, Number) and part.tree.value == 0.0:
                raise scope.mistake("division", "division by zero", operand.place)
        total = Typed(Operation(operator, (total.tree, part.tree)), dimension)
    return total


def _is_share(formula: t.Formula) -> bool:
    """Written in % or ppm."""
    inner = formula.operand if isinstance(formula, t.Negative) else formula
    return isinstance(inner, t.Num) and inner.percent


def _power(base: t.Formula, exponent: t.Formula, where: t.Place, scope: Scope) -> Typed:
    left, right = _plain(base, scope), _plain(exponent, scope)
    if right.dimension != NUMBER:
        raise scope.mistake(
            "dimension", f"an exponent is a pure number, not {in_words(right.dimension)}", exponent.place
        )
    if left.dimension == NUMBER:
        return Typed(Operation("^", (left.tree, right.tree)), NUMBER)
    if (
        not isinstance(right.tree, Number)
        or right.tree.value != int(right.tree.value)
        or abs(right.tree.value) > 20
    ):
        raise scope.mistake(
            "dimension", f"{in_words(left.dimension)} takes a whole number as its exponent", exponent.place
        )
    k = int(right.tree.value)
    d = left.dimension
    return Typed(Operation("^", (left.tree, right.tree)), (d[0] * k, d[1] * k, d[2] * k, d[3] * k))


def _call(call: t.Call, scope: Scope) -> Typed:
    name = call.name.text
    if call.fields:
        raise scope.mistake("call", f"`{name}(...)` with named fields is no formula", call.place)
    if any(p.pair is not None for p in call.positional):
        raise scope.mistake("call", "pairs x: y stand in `points(...)` only", call.place)
    given = [p.value for p in call.positional]
    if name == "current":
        return _current(call, given, scope)
    if name in scope.curves:
        needs, gives = scope.curves[name]
        _count(call, given, (1, 1), scope)
        inner = _plain(given[0], scope)
        _same(inner, needs, given[0], scope, f"`{name}` takes")
        return Typed(Operation("curve", (inner.tree,), name), gives)
    if name not in FUNCTIONS:
        raise scope.mistake(
            "unknown-function",
            f"there is no function `{name}`",
            call.name.place,
            nearest(name, [*FUNCTIONS, *scope.curves]),
        )
    counts = {"min": (2, 16), "max": (2, 16), "limit": (3, 3)}.get(name, (1, 1))
    _count(call, given, counts, scope)
    inners = [_plain(g, scope) for g in given]
    if name in ("sqrt", "ln", "exp", "tanh", "atan"):
        _same(inners[0], NUMBER, given[0], scope, f"`{name}` takes")
        return Typed(Operation(name, (inners[0].tree,)), NUMBER)
    for inner, g in zip(inners[1:], given[1:], strict=True):
        _same(inner, inners[0].dimension, g, scope, f"all of `{name}` are")
    if name in ("min", "max"):
        total = inners[0].tree
        for inner in inners[1:]:
            total = Operation(name, (total, inner.tree))
        return Typed(total, inners[0].dimension)
    return Typed(Operation(name, tuple(i.tree for i in inners)), inners[0].dimension)


def _current(call: t.Call, given: list[t.Formula], scope: Scope) -> Typed:
    _count(call, given, (1, 1), scope)
    part = given[0]
    if not isinstance(part, t.Word):
        raise scope.mistake("call", "`current(...)` takes the name of a part", part.place)
    full = scope.part(part.text)
    if full is None:
        raise scope.mistake(
            "unknown-part", f"there is no part `{part.text}`", part.place, nearest(part.text, scope.parts)
        )
    return Typed(CurrentRef(full), AMPERE)


def _count(call: t.Call, given: list[t.Formula], counts: tuple[int, int], scope: Scope) -> None:
    if not counts[0] <= len(given) <= counts[1]:
        wanted = str(counts[0]) if counts[0] == counts[1] else f"{counts[0]} to {counts[1]}"
        raise scope.mistake(
            "call",
            f"`{call.name.text}` takes {wanted} argument{'' if wanted == '1' else 's'}, not {len(given)}",
            call.place,
        )


def _same(found: Typed, wanted: Dimension, formula: t.Formula, scope: Scope, who: str) -> None:
    if found.dimension != wanted:
        raise scope.mistake(
            "dimension", f"{who} {in_words(wanted)}, not {in_words(found.dimension)}", formula.place
        )


def require(found: Typed, wanted: Dimension, formula: t.Formula, scope: Scope, who: str) -> None:
    """CircuitError `dimension` unless a formula has the wanted dimension; a temperature in degC counts only where K is wanted by name."""
    if found.scale and wanted != KELVIN:
        raise scope.mistake("dimension", f"{who} {in_words(wanted)}, not a temperature", formula.place)
    _same(found, wanted, formula, scope, who)


def is_constant(tree: Expression) -> bool:
    """No net and no current in it."""
    stack = [tree]
    while stack:
        node = stack.pop()
        if isinstance(node, NetRef | CurrentRef):
            return False
        if isinstance(node, Operation):
            stack.extend(node.arguments)
    return True


def lets_in(tree: Expression) -> set[str]:
    """Names of the lets in a tree."""
    found: set[str] = set()
    stack = [tree]
    while stack:
        node = stack.pop()
        if isinstance(node, LetRef):
            found.add(node.name)
        elif isinstance(node, Operation):
            stack.extend(node.arguments)
    return found
