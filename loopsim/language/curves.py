"""`curve NAME = polynomial(...)` or `points(...)`: a static characteristic y(x)."""

from __future__ import annotations

import math

from loopsim.circuit import Curve
from loopsim.language import tree as t
from loopsim.language.formulas import Scope, Typed, in_words, require, typed
from loopsim.language.numbers import nominal
from loopsim.units import AMPERE, NUMBER, VOLT, Dimension, name_of


def read_curve(name: t.Word, call: t.Call, scope: Scope) -> tuple[Curve, tuple[Dimension, Dimension]]:
    """The curve, and the dimensions that it takes and gives."""
    form = call.name.text
    readers = {"polynomial": _polynomial, "points": _points}
    if form not in readers:
        raise scope.mistake(
            "curve-form", f"a curve is `polynomial(...)` or `points(...)`, not `{form}`", call.name.place
        )
    if call.fields or not call.positional:
        raise scope.mistake(
            "curve-form", f"`{form}` takes values", call.place, "for example polynomial(2 mA/V, 1 mA/V^3)"
        )
    values, needs, gives = readers[form](call, scope)
    trees = tuple(value.tree for value in values)
    curve = Curve(name.text, form, trees, name_of(needs), name_of(gives), scope.source.span(name.place))
    return curve, (needs, gives)


def _polynomial(call: t.Call, scope: Scope) -> tuple[list[Typed], Dimension, Dimension]:
    values = []
    for item in call.positional:
        if item.pair is not None:
            raise scope.mistake("curve-form", "`polynomial` takes coefficients, not pairs", item.value.place)
        values.append(typed(item.value, scope))
    first = values[0].dimension
    gives = (first[0] + 1, first[1], first[2], first[3])
    if gives not in (AMPERE, VOLT):
        raise scope.mistake(
            "dimension",
            f"the first coefficient is in A/V or V/V, not {in_words(first)}",
            call.positional[0].value.place,
        )
    for k, (value, item) in enumerate(zip(values, call.positional, strict=True), start=1):
        wanted = (gives[0] - k, gives[1], gives[2], gives[3])
        require(value, wanted, item.value, scope, f"coefficient {k} is in")
        nominal(value.tree, item.value, scope, {})
    return values, VOLT, gives


def _points(call: t.Call, scope: Scope) -> tuple[list[Typed], Dimension, Dimension]:
    values: list[Typed] = []
    needs = gives = NUMBER
    last = -math.inf
    for k, item in enumerate(call.positional):
        if item.pair is None:
            raise scope.mistake(
                "curve-form",
                "`points` takes pairs x: y",
                item.value.place,
                "for example points(0 V: 0 A, 1 V: 2 mA)",
            )
        x, y = typed(item.value, scope), typed(item.pair, scope)
        if k == 0:
            needs, gives = x.dimension, y.dimension
            if needs != VOLT or gives not in (AMPERE, VOLT):
                raise scope.mistake("dimension", "the pairs of a curve are V: A or V: V", item.value.place)
        require(x, needs, item.value, scope, "x is in")
        require(y, gives, item.pair, scope, "y is in")
        here = nominal(x.tree, item.value, scope, {})
        nominal(y.tree, item.pair, scope, {})
        if here <= last:
            raise scope.mistake("curve-points", "x has to rise from pair to pair", item.value.place)
        last = here
        values += [x, y]
    if len(call.positional) < 2:
        raise scope.mistake("curve-points", "a curve has at least two points", call.place)
    return values, needs, gives
