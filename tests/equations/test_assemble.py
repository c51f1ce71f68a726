"""Circuit and settings to arrays: values, batches, what moves with a let, mistakes."""

import copy
import pickle

import numpy as np
import pytest
from probing import solve

from loopsim.build import CircuitBuilder, current, let, net, operation, waveform
from loopsim.circuit import Circuit, Curve, Part, Tolerance
from loopsim.equations.assemble import (
    assemble,
    dependence,
    is_affine,
    let_range,
    parameter_values,
    pin_currents,
    tolerance_limits,
)
from loopsim.equations.plan import plan
from loopsim.errors import CircuitError, Span
from loopsim.expressions import LetRef, Number

ARRAYS = ("C", "G", "B", "W", "c", "V", "d", "s", "supply", "parameters")


def kiln() -> Circuit:
    """A bit of everything, with lets that move every array."""
    b = CircuitBuilder("kiln")
    b.let("supply", 9.0)
    b.let("half", operation("/", let("supply"), 2.0))
    b.let("ohms", 1e3, tolerance=Tolerance(-0.01, 0.01, relative=True))
    b.let("gain", 1e5)
    b.let("early", 60.0)
    b.let("bend", 0.5)
    b.let("beat", 50.0)
    b.let("farads", 1e-9)
    b.chain("gnd", "battery", "vcc", device="voltage_source", voltage=let("supply"))
    b.chain(
        "gnd",
        "signal",
        "in",
        device="voltage_source",
        voltage=waveform("sine", amplitude=1.0, frequency=let("beat"), offset=let("half")),
    )
    b.chain("in", "r1", "x", device="resistor", resistance=let("ohms"))
    b.chain("x", "c1", "gnd", device="capacitor", capacitance=let("farads"))
    b.chain("x", "d1", "gnd", device="diode", junction_capacitance=1e-12, series_resistance=2.0)
    b.chain(
        "vcc",
        "p1",
        "x",
        device="curve_conductance",
        curve=b.curve("poly", "polynomial", [1e-3, operation("*", let("bend"), 1e-4)]),
    )
    b.part(
        "q1",
        "bipolar_npn",
        {"collector": "col", "base": "x", "emitter": "gnd"},
        early_voltage=let("early"),
        transit_time=1e-9,
    )
    b.chain(
        "vcc",
        "r2",
        "col",
        device="resistor",
        resistance=operation("*", 4.0, let("ohms")),
        temperature_coefficient=1e-4,
    )
    b.part(
        "u1", "opamp", {"plus": "x", "minus": "fb", "out": "out", "high": "vcc", "low": "gnd"},
        gain=let("gain"), gain_bandwidth=1e6, slew_rate=1e6, input_offset=1e-3,
    )  # fmt: skip
    b.chain("out", "r3", "fb", device="resistor", resistance=1e4)
    b.chain("fb", "r4", "gnd", device="resistor", resistance=1e4)
    b.chain(
        "gnd",
        "e1",
        "mirror",
        device="controlled_voltage_source",
        formula=operation("tanh", operation("*", let("half"), net("x"))),
    )
    b.chain("mirror", "l1", "y", device="inductor", inductance=1e-3)
    b.chain("y", "l2", "z", device="inductor", inductance=2e-3)
    b.chain("z", "r5", "gnd", device="resistor", resistance=50.0)
    b.couple("l1", "l2", 0.3)
    return b.circuit()


KILN = kiln()
SETTINGS = {
    "supply": np.array([8.0, 9.0, 9.5]),
    "ohms": np.array([990.0, 1e3, 1234.5]),
    "ambient": np.array([-20.0, 25.0, 60.0]),
    "early": np.array([30.0, 60.0, 70.0]),
    "bend": np.array([0.4, 0.5, 0.6]),
    "gain": np.array([1e4, 1e5, 3e5]),
    "farads": np.array([1e-9, 2e-9, 1e-10]),
    "beat": np.array([40.0, 50.0, 60.0]),
}


def test_a_batch_equals_a_loop_of_singles_to_the_last_digit():
    together = assemble(KILN, SETTINGS)
    for j in range(3):
        single = assemble(KILN, {name: values[j] for name, values in SETTINGS.items()})
        for name in ARRAYS:
            whole, one = getattr(together, name), getattr(single, name)
            assert np.array_equal(whole[j] if whole.ndim > one.ndim else whole, one), name
        for t in (0.0, 0.003, 0.017):
            assert np.allclose(together.source(t)[j], single.source(t), rtol=1e-15, atol=1e-18)


def test_only_arrays_that_move_get_a_batch_axis():
    batch = assemble(KILN, {"supply": np.array([1.0, 2.0])})
    base = assemble(KILN)
    # half follows supply; it is in the slope of the controlled source and in the offset of the sine
    moved = {name for name in ARRAYS if getattr(batch, name).ndim > getattr(base, name).ndim}
    assert moved == {"s", "supply", "W"}
    assert batch.G is base.G


def test_residual_and_jacobian_of_a_batch_are_those_of_its_members():
    rng = np.random.default_rng(3)
    together = assemble(KILN, SETTINGS)
    x = rng.normal(0.3, 0.2, (3, together.n))
    for j in range(3):
        single = assemble(KILN, {name: values[j] for name, values in SETTINGS.items()})
        assert np.allclose(together.residual(x)[j], single.residual(x[j]), rtol=1e-10, atol=1e-12)
        assert np.allclose(together.jacobian(x)[j], single.jacobian(x[j]), rtol=1e-10, atol=1e-15)


def test_the_jacobian_is_the_derivative_of_the_residual():
    rng = np.random.default_rng(7)
    system = assemble(KILN)
    x = rng.normal(0.4, 0.2, system.n)
    h = 1e-6
    for j in range(system.n):
        e = np.zeros(system.n)
        e[j] = h
        slope = (system.residual(x + e) - system.residual(x - e)) / (2 * h)
        assert np.allclose(
            system.jacobian(x)[:, j], slope, rtol=1e-5, atol=1e-6 * np.max(np.abs(system.jacobian(x)[:, j]))
        )


def test_settings_replace_values_and_derived_lets_follow():
    values = parameter_values(KILN, {"supply": 12.0})
    assert values["half"] == 6.0
    assert values["ambient"] == 25.0
    assert parameter_values(KILN, {"half": 1.0})["supply"] == 9.0
    follows = assemble(KILN, {"supply": 12.0})
    both = assemble(KILN, {"supply": 12.0, "half": 6.0})
    for name in ARRAYS:
        assert np.array_equal(getattr(follows, name), getattr(both, name))


def test_settings_equal_to_the_nominal_values_give_the_nominal_system():
    assert assemble(KILN, {"supply": 9.0}) is assemble(KILN)
    assert assemble(KILN, {}) is assemble(KILN)


def test_settings_equal_a_circuit_written_with_them():
    def divider(ohms, volts):
        b = CircuitBuilder("divider")
        b.let("ohms", ohms)
        b.let("volts", volts)
        b.chain("gnd", "v", "a", device="voltage_source", voltage=let("volts"))
        b.chain("a", "r1", "b", device="resistor", resistance=let("ohms"))
        b.chain("b", "d1", "gnd", device="diode")
        return b.circuit()

    set_later, written = (
        assemble(divider(1e3, 5.0), {"ohms": 2.2e3, "volts": 3.0}),
        assemble(divider(2.2e3, 3.0)),
    )
    for name in ARRAYS:
        assert np.array_equal(getattr(set_later, name), getattr(written, name)), name


def test_dependence_names_what_a_let_can_move():
    assert dependence(KILN, "ohms") == {"G"}
    assert dependence(KILN, "early") == {"V"}
    assert dependence(KILN, "bend") == {"parameters"}
    assert dependence(KILN, "farads") == {"C"}
    assert dependence(KILN, "beat") == {"s", "supply", "timed"}
    assert dependence(KILN, "supply") == {"s", "supply", "W", "timed"}
    assert dependence(KILN, "ambient") >= {"G", "B", "W"}


@pytest.mark.parametrize("name", list(SETTINGS))
def test_what_dependence_does_not_name_never_moves(name):
    base, moved = assemble(KILN), assemble(KILN, {name: SETTINGS[name][0]})
    for array in set(ARRAYS) - dependence(KILN, name):
        assert np.array_equal(getattr(base, array), getattr(moved, array)), array


def test_affine_lets_are_told_apart():
    b = CircuitBuilder("affine")
    b.let("straight", 1.0)
    b.let("scaled", operation("-", operation("*", 3.0, let("straight")), 2.0))
    b.let("curved", 2.0)
    b.let("divisor", 2.0)
    b.let("ohms", 50.0)
    for j, tree in enumerate(
        (let("scaled"), operation("^", let("curved"), 2.0), operation("/", let("straight"), let("divisor")))
    ):
        b.chain("gnd", f"v{j}", f"n{j}", device="voltage_source", voltage=tree)
        b.chain(f"n{j}", f"r{j}", "gnd", device="resistor", resistance=let("ohms"))
    circuit = b.circuit()
    assert [is_affine(circuit, name) for name in ("straight", "scaled", "curved", "divisor", "ohms")] == [
        True,
        True,
        False,
        False,
        False,
    ]
    # the promise: s is a straight line in the let
    s = [assemble(circuit, {"straight": value}).s for value in (0.0, 1.0, 4.0)]
    assert np.allclose(s[2], s[0] + 4.0 * (s[1] - s[0]), rtol=1e-14)


def test_ranges_and_limits_are_worked_out_from_their_formulas():
    b = CircuitBuilder("ranges")
    b.let("supply", 9.0, tolerance=Tolerance(-0.1, 0.2, relative=True))
    b.let(
        "level",
        4.5,
        low=operation("negative", 1.0),
        high=let("supply"),
        tolerance=Tolerance(-0.5, 0.25, relative=False),
    )
    b.let("wrong", 1.0, low=2.0, high=2.0)
    b.chain("gnd", "v", "n", device="voltage_source", voltage=let("supply"))
    circuit = b.circuit()
    assert let_range(circuit, "level") == (-1.0, 9.0)
    assert let_range(circuit, "level", {"supply": 12.0}) == (-1.0, 12.0)
    assert let_range(circuit, "supply") is None
    with pytest.raises(CircuitError, match="begins at 2"):
        let_range(circuit, "wrong")
    limits = tolerance_limits(circuit)
    assert limits["supply"] == pytest.approx((8.1, 10.8))
    assert limits["level"] == (4.0, 4.75)
    assert list(tolerance_limits(circuit, {"supply": 9.0})) == ["level"]


def test_supply_is_the_share_of_independent_sources():
    system = assemble(KILN)
    x = system.index["current", "battery"]
    assert system.supply[x] == system.s[x] == 9.0
    # the op-amp's offset is its own, not a supply's
    row = system.index["internal", "u1.output_current"]
    assert system.supply[row] == 0.0


def test_waveforms_start_from_their_value_at_time_zero():
    system = assemble(KILN)
    assert np.array_equal(system.source(0.0), system.s)
    row = system.index["current", "signal"]
    assert system.source(0.005)[row] == pytest.approx(4.5 + np.sin(2 * np.pi * 50.0 * 0.005), rel=1e-12)


def test_a_current_may_be_read_from_a_part_that_has_none():
    b = CircuitBuilder("mirror")
    b.chain("gnd", "v", "a", device="voltage_source", voltage=2.0)
    b.chain("a", "r1", "b", device="resistor", resistance=1e3)
    b.chain("b", "d1", "gnd", device="diode", transit_time=1e-9, junction_capacitance=1e-12)
    b.chain(
        "gnd", "copy", "out", device="controlled_current_source", formula=operation("*", 2.0, current("d1"))
    )
    b.chain("out", "load", "gnd", device="resistor", resistance=1e3)
    circuit = b.circuit()
    system = assemble(circuit)
    assert ("current", "d1") in system.index
    x = solve(system)
    found = pin_currents(circuit, x)
    assert found["d1"] == pytest.approx(x[system.index["current", "d1"]], rel=1e-12)
    assert found["d1"] == pytest.approx(found["r1"], rel=1e-9)
    assert x[system.index["net", "out"]] == pytest.approx(2e3 * found["r1"], rel=1e-9)
    # the charge moved into the current's law, so the balance of net b has none left
    assert not np.any(system.C[system.index["net", "b"]])
    assert np.any(system.C[system.index["current", "d1"]])


def test_a_plan_is_made_once_and_stays_at_home():
    circuit = kiln()
    assert plan(circuit) is plan(circuit)
    for other in (pickle.loads(pickle.dumps(circuit)), copy.deepcopy(circuit)):
        assert other == circuit
        assert np.array_equal(assemble(other).G, assemble(circuit).G)


def test_shared_arrays_cannot_be_written_to():
    with pytest.raises(ValueError):
        assemble(KILN).G[0, 0] = 1.0


def _code(circuit, settings=None):
    with pytest.raises(CircuitError) as fault:
        assemble(circuit, settings)
    assert fault.value.message
    return fault.value.code


def test_mistakes_in_settings_are_named():
    assert _code(KILN, {"suply": 1.0}) == "unknown-let"
    with pytest.raises(CircuitError, match="suply") as fault:
        assemble(KILN, {"suply": 1.0})
    assert "supply" in fault.value.hint
    assert _code(KILN, {"supply": np.nan}) == "setting-value"
    assert _code(KILN, {"supply": "much"}) == "setting-value"
    assert _code(KILN, {"supply": np.ones(2), "ohms": np.ones(3)}) == "setting-shape"
    assert _code(KILN, {"supply": np.ones((2, 2))}) == "setting-shape"
    assert _code(KILN, {"ambient": -300.0}) == "field-range"
    assert _code(KILN, {"ohms": -1.0}) == "field-range"


def _broken(change):
    b = CircuitBuilder("broken")
    b.let("good", 1.0)
    b.chain("gnd", "v", "a", device="voltage_source", voltage=1.0)
    change(b)
    return b.circuit()


MISTAKES = {
    "let-cycle": lambda b: (b.let("p", let("q")), b.let("q", let("p"))),
    "unknown-let": lambda b: b.chain("a", "r", "gnd", device="resistor", resistance=let("godd")),
    "unknown-field": lambda b: b.chain("a", "r", "gnd", device="resistor", resistance=1.0, resistence=2.0),
    "field-missing": lambda b: b.chain("a", "r", "gnd", device="resistor"),
    "pin-missing": lambda b: b.part("q", "bipolar_npn", {"base": "a", "emitter": "gnd"}),
    "unknown-pin": lambda b: b.part(
        "q", "bipolar_npn", {"base": "a", "emitter": "gnd", "collector": "a", "gate": "a"}
    ),
    "formula-value": lambda b: b.let("bad", operation("/", 1.0, 0.0)),
    "field-range": lambda b: b.chain("a", "r", "gnd", device="resistor", resistance=0.0),
    "field-kind": lambda b: b.chain("a", "r", "gnd", device="resistor", resistance="much"),
    "duplicate-part": lambda b: b.chain("a", "v", "gnd", device="resistor", resistance=1.0),
    "unknown-inductor": lambda b: b.couple("v", "v", 0.5),
    "unknown-net": lambda b: b.chain(
        "a", "e", "gnd", device="controlled_current_source", formula=net("nowhere")
    ),
    "unknown-part": lambda b: b.chain(
        "a", "e", "gnd", device="controlled_current_source", formula=current("nobody")
    ),
    "unknown-curve": lambda b: b.chain(
        "a",
        "e",
        "gnd",
        device="controlled_current_source",
        formula=operation("curve", net("a"), curve="none"),
    ),
    "formula-term": lambda b: b.chain(
        "a", "e", "gnd", device="controlled_current_source", formula=operation("*", net("a"), net("a"))
    ),
    "unknown-waveform": lambda b: b.chain(
        "a", "e", "gnd", device="current_source", current=waveform("triangle", high=1.0)
    ),
    "waveform-times": lambda b: b.chain(
        "a", "e", "gnd", device="current_source", current=waveform("square", high=1.0, period=1.0, width=2.0)
    ),
    "curve-points": lambda b: b.chain(
        "a", "e", "gnd", device="curve_conductance", curve=Curve("k", "points", (Number(0.0), Number(1.0)))
    ),
    "unknown-current": lambda b: (
        b.part("q", "bipolar_npn", {"base": "a", "emitter": "gnd", "collector": "a"}),
        b.chain("a", "e", "gnd", device="controlled_current_source", formula=current("q")),
    ),
}


@pytest.mark.parametrize("code", list(MISTAKES))
def test_mistakes_in_a_circuit_are_named(code):
    assert _code(_broken(MISTAKES[code])) == code


def test_no_third_party_exception_leaves_a_formula():
    for tree in (
        operation("ln", 0.0),
        operation("sqrt", -1.0),
        operation("^", -8.0, 1.0 / 3.0),
        operation("exp", 1e4),
        operation("^", 0.0, -1.0),
    ):
        assert _code(_broken(lambda b, tree=tree: b.let("bad", tree))) == "formula-value"


def test_lets_may_be_given_in_any_order_and_depth():
    b = CircuitBuilder("deep")
    for j in range(400):
        b.let(f"a{j}", operation("+", LetRef(f"a{j + 1}"), 1.0))
    b.let("a400", 0.0)
    b.chain("gnd", "v", "n", device="voltage_source", voltage=let("a0"))
    b.chain("n", "r", "gnd", device="resistor", resistance=1.0)
    assert parameter_values(b.circuit())["a0"] == 400.0


def test_a_mistake_in_a_part_carries_its_place():
    place = Span("pump.loop", 7, 12, 19, "a -- r: -5 ohm -- gnd")
    for fields in ({"resistance": Number(-5.0)}, {"resistance": Number(5.0), "colour": Number(1.0)}, {}):
        part = Part("r", "resistor", {"from": "a", "to": "gnd"}, fields, place)
        with pytest.raises(CircuitError) as fault:
            assemble(Circuit("pump", nets=("a",), parts=(part,)))
        assert fault.value.span == place
        assert str(fault.value).startswith("pump.loop:7:12: ")
    slewing = Part(
        "u",
        "opamp",
        dict.fromkeys(("plus", "minus", "out", "high", "low"), "a"),
        {"slew_rate": Number(1e6)},
        place,
    )
    with pytest.raises(CircuitError) as fault:
        assemble(Circuit("pump", nets=("a",), parts=(slewing,)))
    assert (fault.value.code, fault.value.span) == ("field-missing", place)


def test_an_empty_circuit_has_an_empty_system():
    system = assemble(Circuit("empty"))
    assert (system.n, system.m) == (0, 0)
    assert system.residual(np.zeros(0)).shape == (0,)
