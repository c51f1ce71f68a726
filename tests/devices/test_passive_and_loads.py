"""Linear parts, static curves, the switch and the constant-power load."""

import numpy as np
import pytest
from probing import currents, probed, solve

from loopsim.build import CircuitBuilder, let, operation
from loopsim.circuit import Curve
from loopsim.devices.curves import points_curve, polynomial_curve
from loopsim.devices.phi import VALUE
from loopsim.equations.assemble import assemble, pin_currents
from loopsim.errors import CircuitError
from loopsim.expressions import Number


def test_ohms_law_in_both_units():
    at = {"from": 3.0, "to": 1.0}
    assert currents("resistor", at, resistance=4e3)["from"] == pytest.approx(0.5e-3, rel=1e-15)
    assert currents("conductance", at, conductance=0.25e-3)["from"] == pytest.approx(0.5e-3, rel=1e-15)


def test_a_capacitor_is_open_at_rest_and_stores_its_charge():
    system = assemble(probed("capacitor", {"from": 3.0, "to": 1.0}, capacitance=2e-6))
    x = solve(system)
    charge = system.C @ x
    assert charge[system.index["net", "at_from"]] == pytest.approx(4e-6, rel=1e-15)
    assert charge[system.index["net", "at_to"]] == pytest.approx(-4e-6, rel=1e-15)
    assert not np.any(x[[system.index["current", "hold_from"], system.index["current", "hold_to"]]])


def test_coupled_inductors_hold_their_flux():
    bench = CircuitBuilder("transformer")
    for name, value in (("l1", 2e-3), ("l2", 8e-3)):
        bench.chain("gnd", f"i_{name}", name, device="current_source", current=1.0)
        bench.chain(name, name, "gnd", device="inductor", inductance=value)
    bench.couple("l1", "l2", 0.5)
    system = assemble(bench.circuit())
    flux = system.C @ solve(system)
    # M = 0.5 sqrt(2 mH 8 mH) = 2 mH; both currents are 1 A
    assert flux[system.index["current", "l1"]] == pytest.approx(4e-3, rel=1e-14)
    assert flux[system.index["current", "l2"]] == pytest.approx(10e-3, rel=1e-14)
    assert np.all(np.linalg.eigvalsh(system.C) >= -1e-18)


def test_a_polynomial_curve_is_its_polynomial():
    # tunnel diode after L. O. Chua, A. Ushida 1976; coefficients from memory
    values = (11.8, -10.5, 2.5)
    tunnel = Curve("tunnel", "polynomial", tuple(Number(v) for v in values))
    for v in (-0.4, 0.2, 1.7, 2.3):
        found = currents("curve_conductance", {"from": v, "to": 0.0}, curve=tunnel)["from"]
        assert found == pytest.approx(2.5 * v**3 - 10.5 * v**2 + 11.8 * v, rel=1e-12)


@pytest.mark.parametrize("start", [-3.0, 0.5])
def test_a_curve_of_points_passes_through_them_and_goes_on_with_its_end_slopes(start):
    x = start + np.array([0.0, 1.0, 2.5, 3.0])
    y = np.array([-2.0, 1.0, 0.0, 4.0])
    curve = points_curve([v for pair in zip(x, y, strict=True) for v in pair])
    numbers = [np.float64(p) for p in curve.parameters]
    for v in np.linspace(start, start + 3.0, 31):
        assert VALUE[curve.kind](v, numbers) == pytest.approx(float(np.interp(v, x, y)), rel=1e-12, abs=1e-12)
    assert VALUE[curve.kind](start - 2.0, numbers) == pytest.approx(-2.0 - 2 * 3.0, rel=1e-12)
    assert VALUE[curve.kind](start + 4.0, numbers) == pytest.approx(4.0 + 8.0, rel=1e-12)


def test_points_must_ascend():
    with pytest.raises(CircuitError, match="ascend"):
        points_curve([0.0, 0.0, 1.0, 1.0, 1.0, 2.0])
    with pytest.raises(CircuitError, match="two points"):
        points_curve([0.0, 0.0])


def test_polynomial_and_points_may_stand_in_one_circuit():
    bench = CircuitBuilder("mixed")
    bench.let("v", 1.3)
    bench.chain("gnd", "hold", "a", device="voltage_source", voltage=let("v"))
    bench.chain("a", "p", "gnd", device="curve_conductance", curve=bench.curve("p", "polynomial", [1.0, 0.5]))
    bench.chain(
        "a",
        "q",
        "gnd",
        device="curve_conductance",
        curve=bench.curve("q", "points", [0.0, 0.0, 1.0, 2.0, 2.0, 2.5]),
    )
    circuit = bench.circuit()
    found = pin_currents(circuit, solve(assemble(circuit)))
    assert found["p"] == pytest.approx(1.3 + 0.5 * 1.69, rel=1e-13)
    assert found["q"] == pytest.approx(2.15, rel=1e-13)
    assert polynomial_curve([1.0, 0.5]).parameters == (1.0, 0.5)


def _switched(control, **fields):
    bench = CircuitBuilder("switched")
    bench.let("control", control)
    bench.chain("gnd", "hold", "c", device="voltage_source", voltage=let("control"))
    bench.chain("gnd", "supply", "a", device="voltage_source", voltage=2.0)
    bench.chain("a", "x", "gnd", device="switch", control="c", **fields)
    circuit = bench.circuit()
    return pin_currents(circuit, solve(assemble(circuit)))["x"]


def test_a_switch_goes_smoothly_from_off_to_on():
    fields = {"on_resistance": 2.0, "off_resistance": 2e3, "threshold": 0.8, "width": 0.1}
    assert _switched(-1.0, **fields) == pytest.approx(1e-3, rel=1e-9)
    assert _switched(3.0, **fields) == pytest.approx(1.0, rel=1e-12)
    assert _switched(0.8, **fields) == pytest.approx(2.0 * 0.5 * (0.5 + 0.0005), rel=1e-12)
    assert _switched(0.87, **fields) == pytest.approx(2.0 * (0.25025 + 0.24975 * np.tanh(0.7)), rel=1e-12)


@pytest.mark.parametrize(
    ("times", "before", "between", "after"),
    [
        ({"close_time": 1e-3}, "off", "on", "on"),
        ({"open_time": 1e-3}, "on", "off", "off"),
        ({"close_time": 1e-3, "open_time": 3e-3}, "off", "on", "off"),
        ({"open_time": 1e-3, "close_time": 3e-3}, "on", "off", "on"),
    ],
)
def test_a_switch_changes_at_its_times(times, before, between, after):
    circuit = probed(
        "switch",
        {"from": 1.0, "to": 0.0},
        on_resistance=1.0,
        off_resistance=1e6,
        transition_time=1e-6,
        **times,
    )
    system = assemble(circuit)
    ohms = {"on": 1.0, "off": 1e6}
    for t, state in ((0.0, before), (0.9e-3, before), (2e-3, between), (4e-3, after)):
        # the control row is linear and alone, so x at time t follows from s(t)
        x = np.linalg.solve(system.jacobian(np.zeros(system.n)), system.source(t))
        x = solve(_with_source(system, t), x)
        assert -x[system.index["current", "hold_from"]] == pytest.approx(-1.0 / ohms[state], rel=1e-8)
    corners = sorted(t for timed in system.timed for t in timed.waveform.corners(0.0, 1.0))
    assert corners == sorted(t + d for t in times.values() for d in (0.0, 1e-6))


def _with_source(system, t):
    from dataclasses import replace

    return replace(system, s=system.source(t))


def test_a_switch_needs_one_way_to_be_told():
    with pytest.raises(CircuitError) as fault:
        assemble(probed("switch", {"from": 1.0, "to": 0.0}))
    assert fault.value.code == "field-missing"
    with pytest.raises(CircuitError) as fault:
        assemble(probed("switch", {"from": 1.0, "to": 0.0}, control="at_to", close_time=1e-3))
    assert fault.value.code == "field-clash"


def test_a_constant_power_load_draws_its_power_above_dropout_and_less_below():
    for v in (1.5, 4.0, 30.0, -12.0):
        found = currents("constant_power_load", {"from": v, "to": 0.0}, power=20.0, dropout_voltage=1.5)[
            "from"
        ]
        assert found * v == pytest.approx(20.0, rel=1e-12)
    u = 0.4 / 1.5
    below = currents("constant_power_load", {"from": 0.4, "to": 0.0}, power=20.0, dropout_voltage=1.5)["from"]
    assert below == pytest.approx(20.0 / 1.5 * (2 * u - u**3), rel=1e-12)
    assert below * 0.4 < 20.0


def test_a_drift_that_turns_a_resistance_negative_is_refused():
    circuit = probed("resistor", {"from": 1.0, "to": 0.0}, resistance=1e3, temperature_coefficient=-0.01)
    with pytest.raises(CircuitError, match="`x`: the temperature coefficient"):
        assemble(circuit, {"ambient": 130.0})


def test_ranges_are_checked_with_the_name_of_the_field():
    with pytest.raises(CircuitError) as fault:
        assemble(probed("resistor", {"from": 1.0, "to": 0.0}, resistance=-5.0))
    assert fault.value.code == "field-range"
    assert "`x.resistance` is -5 ohm" in fault.value.message
    circuit = probed("resistor", {"from": 1.0, "to": 0.0}, resistance=operation("*", let("from"), 10.0))
    with pytest.raises(CircuitError) as fault:
        assemble(circuit, {"from": np.array([1.0, 2.0, -3.0])})
    assert "-30 ohm" in fault.value.message
