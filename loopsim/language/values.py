"""Values with tolerances: `4.7 kohm +/- 1 %`, `9 V +/- 5 mV`, `10 uF + 50 % - 20 %`."""

from __future__ import annotations

from loopsim.circuit import Tolerance
from loopsim.expressions import Expression, Number, Operation
from loopsim.language import tree as t
from loopsim.language.draft import Draft
from loopsim.language.formulas import Scope, Typed, in_words, is_constant, lets_in, typed
from loopsim.units import NUMBER


def refuse_nets(found: Typed, formula: t.Formula, scope: Scope, what: str) -> None:
    """Error where a formula that has to be constant names a net or a current."""
    if not is_constant(found.tree):
        raise scope.mistake("not-constant", f"{what} cannot depend on a net or a current", formula.place)


def constant(formula: t.Formula, scope: Scope, what: str) -> Typed:
    """A formula that names no net and no current."""
    found = typed(formula, scope)
    refuse_nets(found, formula, scope, what)
    return found


def unit_in_words(value: Typed) -> str:
    """The unit of a value, for a message."""
    return f"`{value.scale}`" if value.scale else in_words(value.dimension)


def refuse_tolerance(given: t.Toleranced, scope: Scope, hint: str) -> None:
    """Error for a tolerance behind what is no quantity."""
    if given.tolerance is not None:
        raise scope.mistake("tolerance", "this has no tolerance", given.tolerance.place, hint)


def toleranced(given: t.Toleranced, scope: Scope, draft: Draft) -> tuple[Typed, Tolerance | None]:
    """Value and tolerance; `+ 10 % - 20 %` behind a value with a unit is a tolerance too."""
    if given.tolerance is None:
        return _two_sided(given.value, scope) or (typed(given.value, scope), None)
    value = typed(given.value, scope)
    return value, _tolerance(value, given.tolerance, scope, draft)


def _two_sided(formula: t.Formula, scope: Scope) -> tuple[Typed, Tolerance] | None:
    """`VALUE + 10 % - 20 %`, in either order, unless VALUE is a pure number, which the shares are added to."""
    if not isinstance(formula, t.Chain) or set(formula.operators[-2:]) != {"+", "-"}:
        return None
    shares = formula.operands[-2:]
    if not all(isinstance(share, t.Num) and share.percent for share in shares):
        return None
    first, *others = formula.operands[:-2]
    rest = t.Chain(formula.operators[:-2], (first, *others), formula.place, formula.depth) if others else first
    value = typed(rest, scope)
    if value.dimension == NUMBER:
        return None
    signed = dict(zip(formula.operators[-2:], shares, strict=True))
    up, down = (_share(typed(signed[sign], scope), value, signed[sign], scope) for sign in "+-")
    return value, Tolerance(-down, up, True)


def _share(spread: Typed, value: Typed, written: t.Formula, scope: Scope) -> float:
    """A tolerance that is a share of its value, as a number."""
    assert isinstance(spread.tree, Number)
    size = spread.tree.value
    if value.scale:
        raise scope.mistake(
            "tolerance", "a share of a temperature in degC means nothing", written.place, "write +/- 5 K"
        )
    if size >= 1.0 and value.dimension != NUMBER:
        raise scope.mistake(
            "tolerance", "a tolerance of 100 % or more would let the value vanish", written.place
        )
    return size


def _tolerance(value: Typed, written: t.Formula, scope: Scope, draft: Draft) -> Tolerance:
    """What stands behind `+/-`: a share in % or ppm, or a distance in the unit of the value."""
    if isinstance(written, t.Negative):
        raise scope.mistake("tolerance", "a tolerance is a size, without a sign", written.place)
    spread = constant(written, scope, "a tolerance")
    if lets_in(spread.tree):
        raise scope.mistake(
            "tolerance", "a tolerance is written out; it cannot follow a let", written.place, "for example +/- 1 %"
        )
    # the parameter of a block is a number by now: behind a unit, a pure one is a share
    handed_on = isinstance(written, t.Word) and spread.dimension == NUMBER != value.dimension
    if handed_on or (isinstance(written, t.Num) and written.percent):
        size = _share(spread, value, written, scope)
        return Tolerance(-size, size, True)
    if spread.dimension != value.dimension or (spread.scale and not value.scale):
        unit = unit_in_words(value)
        raise scope.mistake(
            "dimension",
            f"the tolerance of {unit} is in %, ppm or {unit}, not {unit_in_words(spread)}",
            written.place,
        )
    size = abs(draft.number(spread.tree, written, scope))
    return Tolerance(-size, size, False)


def limits(value: Expression, tolerance: Tolerance) -> tuple[Expression, Expression]:
    """The lowest and the highest value that a tolerance allows."""
    low, high = Number(tolerance.low), Number(tolerance.high)
    if not tolerance.relative:
        return Operation("+", (value, low)), Operation("+", (value, high))
    size = Operation("abs", (value,))
    return (
        Operation("+", (value, Operation("*", (size, low)))),
        Operation("+", (value, Operation("*", (size, high)))),
    )
