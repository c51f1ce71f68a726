"""Formulas back to text."""

import pytest

from loopsim.circuit import Curve, Tolerance, Waveform
from loopsim.expressions import CurrentRef, Expression, LetRef, NetRef, Number, Operation, evaluate
from loopsim.output.formulas import field_text, formula_text, tolerance_text

A, B, C = LetRef("a"), NetRef("b"), CurrentRef("r1")


def op(name: str, *arguments: Expression, curve: str = "") -> Operation:
    return Operation(name, arguments, curve)


@pytest.mark.parametrize(
    ("tree", "text"),
    [
        (Number(4700.0), "4.7 kohm"),
        (op("+", A, op("*", Number(2.0), B)), "a + 2 * b"),
        (op("*", op("+", A, B), C), "(a + b) * current(r1)"),
        (op("-", A, op("-", B, C)), "a - (b - current(r1))"),
        (op("-", op("-", A, B), C), "a - b - current(r1)"),
        (op("/", A, op("*", B, C)), "a / (b * current(r1))"),
        (op("^", op("negative", A), Number(2.0)), "(-a) ^ 2"),
        (op("negative", op("^", A, Number(2.0))), "-a ^ 2"),
        (op("^", Number(-2.0), Number(2.0)), "(-2) ^ 2"),
        (op("^", op("^", A, B), C), "(a ^ b) ^ current(r1)"),
        (op("limit", A, Number(-1.0), Number(1.0)), "limit(a, -1, 1)"),
        (op("curve", B, curve="tunnel"), "tunnel(b)"),
        (op("min", A, op("+", A, B)), "min(a, a + b)"),
    ],
)
def test_a_formula_keeps_its_meaning(tree: Expression, text: str) -> None:
    assert formula_text(tree, "ohm") == text


def test_the_brackets_are_those_that_arithmetic_needs() -> None:
    values = {"a": 7.0, "b": 3.0, "c": 2.0}
    names = [LetRef(name) for name in values]
    inner = [op(name, names[1], names[2]) for name in "+-*/^"]
    for name in "+-*/^":
        for right in inner:
            for tree in (op(name, names[0], right), op(name, right, names[0])):
                read = eval(formula_text(tree).replace("^", "**"), {}, values)
                assert read == pytest.approx(evaluate(tree, values))


def test_fields_of_every_form_have_a_text() -> None:
    assert field_text("open_collector") == "open_collector"
    assert field_text(Curve("tunnel", "polynomial", (Number(1.0),))) == "tunnel"
    ramp = Waveform("ramp", {"from": Number(0.0), "to": LetRef("supply")})
    assert field_text(ramp, "V") == "ramp(from = 0, to = supply)"
    points = Waveform("points", {}, ((Number(0.0), Number(1.0)), (Number(0.001), Number(5.0))))
    assert field_text(points) == "points(0: 1, 0.001: 5)"


@pytest.mark.parametrize(
    ("tolerance", "unit", "text"),
    [
        (None, "V", ""),
        (Tolerance(-0.01, 0.01, True), "ohm", "+/- 1 %"),
        (Tolerance(-0.2, 0.1, True), "ohm", "+ 10 % - 20 %"),
        (Tolerance(-0.005, 0.005, False), "V", "+/- 5 mV"),
    ],
)
def test_tolerances_read_as_written(tolerance: Tolerance | None, unit: str, text: str) -> None:
    assert tolerance_text(tolerance, unit) == text
