"""Controlled sources: formulas as sums of saturating terms, entered with the right signs."""

import numpy as np
import pytest
from probing import solve

from loopsim.build import CircuitBuilder, current, let, net, operation
from loopsim.devices.formula import LIMIT_KNEE, sum_of
from loopsim.devices.phi import Kind
from loopsim.equations.assemble import assemble, pin_currents
from loopsim.errors import CircuitError
from loopsim.expressions import NetRef, Number


def _driven(formula, volts, kind="voltage", curves=()):
    """Value of a controlled source whose formula reads nets held at `volts` and the current of `probe`, 2 mA."""
    bench = CircuitBuilder("driven")
    for name, value in volts.items():
        bench.chain("gnd", f"hold_{name}", name, device="voltage_source", voltage=value)
    bench.chain("gnd", "supply", "s", device="voltage_source", voltage=2.0)
    bench.chain("s", "probe", "gnd", device="resistor", resistance=1e3)
    for curve in curves:
        bench.curve(*curve)
    if kind == "voltage":
        bench.chain("gnd", "source", "out", device="controlled_voltage_source", formula=formula)
        bench.chain("out", "load", "gnd", device="resistor", resistance=1e3)
    else:
        bench.chain("gnd", "source", "out", device="controlled_current_source", formula=formula)
        bench.chain("out", "load", "gnd", device="resistor", resistance=1.0)
    circuit = bench.circuit()
    system = assemble(circuit)
    x = solve(system)
    if kind == "current":
        assert pin_currents(circuit, x)["source"] == pytest.approx(
            x[system.index["net", "out"]], rel=1e-9, abs=1e-15
        )
    return x[system.index["net", "out"]]


LINEAR = operation("+", operation("*", 3.0, operation("-", net("a"), net("b"))), 0.5)
LIMITED = operation("limit", operation("*", 2.0, net("a")), -1.0, 4.0)
NESTED = operation("tanh", operation("+", net("a"), operation("*", 2.0, operation("atan", net("b")))))
CASES = [
    (LINEAR, lambda v: 3 * (v["a"] - v["b"]) + 0.5),
    (operation("negative", operation("/", net("a"), 4.0)), lambda v: -v["a"] / 4),
    (
        operation("*", operation("tanh", operation("*", net("a"), 2.0)), 5.0),
        lambda v: 5 * np.tanh(2 * v["a"]),
    ),
    (operation("-", operation("atan", net("b")), operation("^", 2.0, 3.0)), lambda v: np.arctan(v["b"]) - 8),
    (NESTED, lambda v: np.tanh(v["a"] + 2 * np.arctan(v["b"]))),
    (operation("*", 1e3, current("probe")), lambda _: 2.0),
    (
        operation("curve", operation("-", net("a"), 1.0), curve="bend"),
        lambda v: 2 * (v["a"] - 1) + 0.5 * (v["a"] - 1) ** 2,
    ),
    (operation("-", net("a"), net("gnd")), lambda v: v["a"]),
]


@pytest.mark.parametrize("kind", ["voltage", "current"])
@pytest.mark.parametrize(("formula", "law"), CASES, ids=range(len(CASES)))
def test_a_controlled_source_has_the_value_of_its_formula(formula, law, kind):
    for a, b in ((0.3, -0.2), (-1.4, 0.9)):
        found = _driven(formula, {"a": a, "b": b}, kind, [("bend", "polynomial", [2.0, 0.5])])
        assert found == pytest.approx(law({"a": a, "b": b}), rel=1e-9)


def test_limit_is_straight_within_flat_outside_and_off_by_a_knee_at_the_corner():
    for a, wanted in ((0.7, 1.4), (5.0, 4.0), (-3.0, -1.0)):
        assert _driven(LIMITED, {"a": a, "b": 0.0}) == pytest.approx(wanted, rel=1e-9)
    knee = LIMIT_KNEE * 5.0
    assert _driven(LIMITED, {"a": 2.0, "b": 0.0}) == pytest.approx(4.0 - knee * np.log(2.0), rel=1e-12)


def test_a_formula_of_constants_only_is_a_constant():
    tree = operation("+", operation("limit", 9.0, 0.0, 5.0), operation("sqrt", 16.0))
    total = sum_of(tree, {}, {})
    assert total.is_constant
    assert total.constant == pytest.approx(9.0, rel=1e-12)


@pytest.mark.parametrize(
    "tree",
    [
        operation("*", net("a"), net("b")),
        operation("/", 1.0, net("a")),
        operation("exp", net("a")),
        operation("^", net("a"), 2.0),
        operation("limit", net("a"), 0.0, net("b")),
    ],
)
def test_what_is_no_sum_is_refused_with_a_way_out(tree):
    with pytest.raises(CircuitError) as fault:
        sum_of(tree, {}, {})
    assert fault.value.code == "formula-term"
    assert fault.value.hint


def test_limits_in_the_wrong_order_are_refused():
    with pytest.raises(CircuitError, match="below"):
        sum_of(operation("limit", NetRef("a"), 2.0, 1.0), {}, {})


def test_like_terms_are_one_coefficient():
    total = sum_of(operation("-", operation("*", 3.0, net("a")), net("a")), {}, {})
    assert total.coefficients == {("net", "a"): 2.0}
    saturating = sum_of(operation("tanh", net("a")), {}, {})
    assert saturating.terms[0].kind == Kind.SATURATION
    assert sum_of(Number(2.0), {}, {}).constant == 2.0


def test_sources_follow_their_arrow():
    bench = CircuitBuilder("arrows")
    bench.let("volts", 9.0)
    bench.chain("gnd", "battery", "vcc", device="voltage_source", voltage=let("volts"))
    bench.chain("vcc", "bias", "a", device="current_source", current=1e-3)
    bench.chain("a", "r", "gnd", device="resistor", resistance=2e3)
    circuit = bench.circuit()
    system = assemble(circuit)
    x = solve(system)
    assert x[system.index["net", "vcc"]] == 9.0
    assert x[system.index["net", "a"]] == pytest.approx(2.0, rel=1e-14)
    found = pin_currents(circuit, x)
    assert found["battery"] == pytest.approx(1e-3, rel=1e-13)
    assert found["bias"] == pytest.approx(1e-3, rel=1e-13)
    assert np.array_equal(system.s, system.supply)
