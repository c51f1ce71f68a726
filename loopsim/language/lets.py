"""`let NAME = FORMULA [TOLERANCE] [in LO .. HI]`: named quantities, in whatever order they refer to each other."""

from __future__ import annotations

from loopsim.circuit import Parameter
from loopsim.expressions import Expression, LetRef
from loopsim.language import tree as t
from loopsim.language.draft import Frame
from loopsim.language.formulas import Typed
from loopsim.language.names import words_in
from loopsim.language.values import constant, refuse_nets, toleranced, unit_in_words
from loopsim.units import name_of


def add_lets(statements: tuple[t.Statement, ...], frame: Frame) -> None:
    """Every let of a frame, each after those that its formula names."""
    waiting: dict[str, t.Let] = {}
    for statement in statements:
        if isinstance(statement, t.Let):
            _check_name(statement.name, waiting, frame)
            waiting[statement.name.text] = statement
    while waiting:
        ready = [name for name, let in waiting.items() if not waiting.keys() & words_in(let.value.value)]
        if not ready:
            word = _on_a_cycle(waiting)
            raise frame.scope.mistake("let-cycle", f"the value of `{word.text}` leads back to itself", word.place)
        for name in ready:
            _add_let(waiting.pop(name), frame)


def _on_a_cycle(waiting: dict[str, t.Let]) -> t.Word:
    """The name of a let that its own formula leads to. waiting: lets that each name another of them."""
    passed: dict[str, None] = {}
    name = next(iter(waiting))
    while name not in passed:
        passed[name] = None
        name = min(waiting.keys() & words_in(waiting[name].value.value))
    return waiting[name].name


def _check_name(name: t.Word, before: dict[str, t.Let], frame: Frame) -> None:
    scope = frame.scope
    if name.text in before or (frame.prefix and name.text in scope.values):
        raise scope.mistake("duplicate-name", f"the let `{name.text}` is given twice", name.place)
    if name.text == "gnd" or "." in name.text:
        raise scope.mistake("reserved-name", f"`{name.text}` cannot be a let", name.place)
    if name.text == "ambient" and frame.prefix:
        raise scope.mistake("reserved-name", "`ambient` belongs to the whole circuit", name.place)


def _add_let(statement: t.Let, frame: Frame) -> None:
    scope, draft, name, formula = frame.scope, frame.draft, statement.name.text, statement.value.value
    draft.count(statement.name.place, scope)
    value, tolerance = toleranced(statement.value, scope, draft)
    refuse_nets(value, formula, scope, "a let")
    if name == "ambient" and value.scale != "degC":
        raise scope.mistake(
            "dimension", "`ambient` is a temperature in degC", formula.place, "let ambient = 25 degC"
        )
    low, high = _range(statement, value, frame)
    full = frame.prefix + name
    unit = value.scale or name_of(value.dimension)
    span = scope.source.span(statement.name.place)
    draft.numbers[full] = draft.number(value.tree, formula, scope)
    draft.parameters[full] = Parameter(full, value.tree, unit, low, high, tolerance, span)
    scope.values[name] = Typed(LetRef(full), value.dimension, value.scale)


def _range(statement: t.Let, value: Typed, frame: Frame) -> tuple[Expression | None, Expression | None]:
    """The ends that stand after `in`, or None and None."""
    if statement.low is None or statement.high is None:
        return None, None
    scope, name = frame.scope, statement.name.text
    ends = []
    for end in (statement.low, statement.high):
        found = constant(end, scope, "a range")
        if found.dimension != value.dimension or found.scale != value.scale:
            raise scope.mistake(
                "dimension",
                f"the range of `{name}` is in {unit_in_words(value)}, not {unit_in_words(found)}",
                end.place,
            )
        ends.append((found.tree, frame.draft.number(found.tree, end, scope)))
    if not ends[0][1] < ends[1][1]:
        raise scope.mistake("let-range", f"the range of `{name}` has to rise", statement.low.place)
    return ends[0][0], ends[1][0]
