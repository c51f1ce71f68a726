"""Op-amp and comparator: gain, rails, trip points, dynamics, outputs."""

import numpy as np
import pytest
from probing import currents, probed, solve

from loopsim.build import CircuitBuilder, let
from loopsim.circuit import Circuit
from loopsim.equations.assemble import assemble

RAILS = {"high": 9.0, "low": 0.0}


def _inputs(plus, minus, **rails):
    return {"plus": plus, "minus": minus, "high": 15.0, "low": -15.0, **rails}


def _open_loop(
    plus, minus, *, device="opamp", rails=(15.0, -15.0), load=None, **fields
) -> tuple[float, Circuit]:
    """Output voltage of an amplifier whose inputs and rails are held, and the circuit."""
    bench = CircuitBuilder("open_loop")
    for name, value in (("plus", plus), ("minus", minus), ("high", rails[0]), ("low", rails[1])):
        bench.let(name, value)
        bench.chain("gnd", f"hold_{name}", name, device="voltage_source", voltage=let(name))
    bench.part(
        "u1", device, {"plus": "plus", "minus": "minus", "out": "out", "high": "high", "low": "low"}, **fields
    )
    bench.chain(
        "out", "load", load[1] if load else "gnd", device="resistor", resistance=load[0] if load else 1e4
    )
    circuit = bench.circuit()
    system = assemble(circuit)
    x = _start(system, rails)
    x[system.index["net", "plus"]], x[system.index["net", "minus"]] = plus, minus
    if ("internal", "u1.decision") in system.index:
        x[system.index["internal", "u1.decision"]] = np.sign(plus - minus)
    return float(solve(system, x)[system.index["net", "out"]]), circuit


def _start(system, rails):
    x = np.zeros(system.n)
    x[system.index["net", "high"]], x[system.index["net", "low"]] = rails
    return x


def test_output_is_gain_times_difference_between_the_rails():
    for gain in (10.0, 1e3, 1e5):
        out, _ = _open_loop(0.3 + 4.0 / gain, 0.3, gain=gain)
        assert out == pytest.approx(4.0, rel=1e-9)


def test_offset_adds_to_the_difference_and_bias_flows_into_both_inputs():
    out, _ = _open_loop(0.0, 0.0, gain=1e3, input_offset=2e-3)
    assert out == pytest.approx(2.0, rel=1e-9)
    found = currents(
        "opamp",
        {"plus": 0.5, "minus": 0.2, "out": 0.0, "high": 9.0, "low": -9.0},
        input_bias=3e-9,
        input_resistance=1e6,
        output_resistance=50.0,
    )
    assert found["plus"] == pytest.approx(3e-9 + 0.3e-6, rel=1e-12)
    assert found["minus"] == pytest.approx(3e-9 - 0.3e-6, rel=1e-12)
    assert found["high"] == 0.0


@pytest.mark.parametrize("overdrive", [1e-3, 0.1, 5.0])
def test_rails_hold_the_output_within_overdrive_over_clamp_ratio(overdrive):
    fields = {"headroom_high": 1.2, "headroom_low": 0.1, "gain": 1e6}
    top, _ = _open_loop(overdrive, 0.0, rails=(9.0, 0.0), **fields)
    bottom, _ = _open_loop(0.0, overdrive, rails=(9.0, 0.0), **fields)
    # at the rail the clamp carries the overdrive: its voltage is overdrive / 1000 where that is well above the knee of 1 mV,
    # and the knee rounds the corner by a few knees otherwise
    assert top == pytest.approx(7.8, abs=overdrive / 1000 + 7e-3)
    assert bottom == pytest.approx(0.1, abs=overdrive / 1000 + 7e-3)
    if overdrive == 5.0:
        assert top == pytest.approx(7.8 + 5e-3, abs=1e-4)


def test_headroom_serves_both_rails_unless_one_has_its_own():
    top, _ = _open_loop(0.1, 0.0, rails=(9.0, 0.0), headroom=0.5, headroom_high=1.5)
    bottom, _ = _open_loop(0.0, 0.1, rails=(9.0, 0.0), headroom=0.5, headroom_high=1.5)
    assert (top, bottom) == (pytest.approx(7.5, abs=5e-3), pytest.approx(0.5, abs=5e-3))


def test_any_nets_may_be_rails():
    out, _ = _open_loop(1.0, 0.0, rails=(-2.0, -7.0))
    assert out == pytest.approx(-2.0, abs=5e-3)


def test_output_resistance_divides_the_output():
    out, _ = _open_loop(2e-3, 0.0, gain=1e3, output_resistance=100.0, load=(300.0, "gnd"))
    assert out == pytest.approx(1.5, rel=1e-9)


def _trip_point(knee, clamp_ratio) -> float:
    """Where the lower branch of a comparator with hysteresis ends: its input goes through 12 kohm and the output back
    through 33 kohm to `plus`, `minus` at gnd, rails such that V_sat = 8.95 V, gain 1e5.

    The output v parametrises the characteristic: plus = input stage's answer to v, input = plus + (plus - v) 12 / 33; its
    extreme value is the fold. Found by golden section on that closed form of the circuit, the stage's answer taken from the
    assembled equations.
    """
    bench = CircuitBuilder("trip")
    bench.let("out", 0.0)
    for name, value in (("high", 9.0), ("low", -9.0)):
        bench.chain("gnd", f"hold_{name}", name, device="voltage_source", voltage=value)
    # what the stage needs at its input to hold the output at v: a nullor in the shape of a source in a loop
    bench.chain("gnd", "hold_out", "out", device="voltage_source", voltage=let("out"))
    bench.part(
        "u1", "opamp", {"plus": "plus", "minus": "gnd", "out": "drive", "high": "high", "low": "low"},
        gain=1e5, headroom=0.05, knee=knee, clamp_ratio=clamp_ratio, output_resistance=1.0,
    )  # fmt: skip
    bench.chain("drive", "tie", "out", device="resistor", resistance=1.0)
    circuit = bench.circuit()
    system = assemble(circuit)
    row = system.index["internal", "u1.stage"]

    def needed(v: float) -> float:
        # the stage's balance is linear in plus with slope -1 mS
        x = np.zeros(system.n)
        x[system.index["net", "high"]], x[system.index["net", "low"]] = 9.0, -9.0
        x[row] = v
        balance = system.residual(x)[row]
        return float(balance / -system.jacobian(x)[row, system.index["net", "plus"]])

    def input_at(v: float) -> float:
        plus = needed(v)
        return plus + (plus - v) * 12.0 / 33.0

    low, high = -9.2, -8.5
    ratio = 0.5 * (5.0**0.5 - 1.0)
    for _ in range(120):
        a, b = high - ratio * (high - low), low + ratio * (high - low)
        low, high = (a, high) if input_at(a) < input_at(b) else (low, b)
    return input_at(0.5 * (low + high))


# the figures of docs/reference/devices.md: clamp ratio, knee, trip point (own measurement)
TRIPS = [
    (10.0, 2e-3, 3.2511),
    (10.0, 1e-3, 3.2527),
    (10.0, 0.2e-3, 3.2541),
    (1000.0, 2e-3, 3.2477),
    (1000.0, 1e-3, 3.2511),
    (1000.0, 0.2e-3, 3.2538),
]


@pytest.mark.parametrize(("clamp_ratio", "knee", "volts"), TRIPS)
def test_trip_point_of_the_soft_clamp_is_as_close_to_the_ideal_as_stated(clamp_ratio, knee, volts):
    ideal = 8.95 * 12.0 / 33.0
    assert ideal == pytest.approx(3.2545, abs=5e-5)
    found = _trip_point(knee, clamp_ratio)
    assert found == pytest.approx(volts, abs=6e-5)
    # the rule of thumb of the page: short by k ln(r / b), b = 12 / 45, seen through the divider, and v / A at the input
    short = knee * np.log(clamp_ratio / (12.0 / 45.0)) * 12.0 / 33.0 + 8.95 / 1e5 * 45.0 / 33.0
    assert ideal - found == pytest.approx(short, rel=0.5)


def test_dynamics_are_absent_unless_given():
    _, plain = _open_loop(0.0, 0.0)
    assert not np.any(assemble(plain).C)
    assert assemble(plain).m == 2
    _, moving = _open_loop(0.0, 0.0, gain_bandwidth=1e6)
    assert assemble(moving).m == 2
    _, slewing = _open_loop(0.0, 0.0, gain_bandwidth=1e6, slew_rate=1e6)
    assert assemble(slewing).m == 3


def test_gain_bandwidth_sets_the_pole_and_slew_rate_the_fastest_change():
    gain, bandwidth, slew = 1e4, 2e6, 3e6
    _, circuit = _open_loop(0.0, 0.0, gain=gain, gain_bandwidth=bandwidth, slew_rate=slew)
    system = assemble(circuit)
    row, out, plus = (
        system.index["internal", "u1.output_current"],
        system.index["net", "out"],
        system.index["net", "plus"],
    )
    x = _start(system, (15.0, -15.0))
    jacobian = system.jacobian(x)
    # pole at bandwidth / gain, far from the clamps
    assert jacobian[row, out] / system.C[row, out] == pytest.approx(2 * np.pi * bandwidth / gain, rel=1e-9)
    x[plus] = 10.0
    assert -system.residual(x)[row] / system.C[row, out] == pytest.approx(slew, rel=1e-9)
    x[plus] = -10.0
    assert -system.residual(x)[row] / system.C[row, out] == pytest.approx(-slew, rel=1e-9)


def test_a_slew_rate_leaves_the_gain_at_rest_alone():
    for gain in (10.0, 1e5):
        out, _ = _open_loop(4.0 / gain, 0.0, gain=gain, gain_bandwidth=1e6, slew_rate=1e6)
        assert out == pytest.approx(4.0, rel=1e-9)


def test_push_pull_comparator_goes_to_its_rails():
    top, _ = _open_loop(0.01, 0.0, device="comparator", headroom=0.2)
    bottom, _ = _open_loop(-0.01, 0.0, device="comparator", headroom=0.2)
    assert (top, bottom) == (pytest.approx(14.8, abs=6e-3), pytest.approx(-14.8, abs=6e-3))


def test_open_collector_sinks_through_its_resistance_or_leaves_the_output_to_the_pull_up():
    fields = {
        "device": "comparator",
        "output": "open_collector",
        "sink_resistance": 50.0,
        "rails": (5.0, 0.0),
        "load": (950.0, "high"),
    }
    on, _ = _open_loop(0.0, 0.01, **fields)
    off, _ = _open_loop(0.01, 0.0, **fields)
    assert on == pytest.approx(5.0 * 50.0 / 1000.0, rel=1e-9)
    assert off == pytest.approx(5.0, rel=1e-9)


@pytest.mark.parametrize("output", ["push_pull", "open_collector"])
def test_a_delay_changes_nothing_at_rest(output):
    fields = {"device": "comparator", "output": output, "rails": (5.0, 0.0), "load": (2e3, "high")}
    for difference in (-0.2, -0.01, 0.01, 0.2):
        plain, _ = _open_loop(difference, 0.0, **fields)
        delayed, _ = _open_loop(difference, 0.0, propagation_delay=1e-6, **fields)
        assert delayed == pytest.approx(plain, abs=5e-3)


@pytest.mark.parametrize("gain", [1e3, 1e5])
def test_a_delay_keeps_the_gain(gain):
    slope = []
    for delay in ({}, {"propagation_delay": 1e-6}):
        outs = [_open_loop(v / gain, 0.0, device="comparator", gain=gain, **delay)[0] for v in (-0.01, 0.01)]
        slope.append((outs[1] - outs[0]) * gain / 0.02)
    assert slope == pytest.approx([gain, gain], rel=1e-6)


@pytest.mark.parametrize("output", ["push_pull", "open_collector"])
def test_the_output_changes_after_the_propagation_delay(output):
    delay = 400e-9
    fields = {
        "device": "comparator",
        "output": output,
        "rails": (5.0, 0.0),
        "load": (2e3, "high"),
        "propagation_delay": delay,
    }
    _, circuit = _open_loop(-0.5, 0.0, **fields)
    system = assemble(circuit)
    start = _start(system, (5.0, 0.0))
    start[system.index["internal", "u1.decision"]] = -1.0
    start[system.index["net", "plus"]] = -0.5
    before = solve(system, start)
    after = assemble(circuit, {"plus": 0.5})
    # only the decision moves: y' = (1 - y) / tau from -1, every other unknown follows at once; implicit midpoint in small steps
    x, h, t = before, delay / 200, 0.0
    out = after.index["net", "out"]
    while abs(x[out] - before[out]) < 2.4 and t < 5 * delay:
        old = x
        for _ in range(30):
            step = np.linalg.solve(
                after.C / h + after.jacobian(x), -(after.C @ (x - old) / h + after.residual(x))
            )
            x = x + np.clip(step, -0.5, 0.5)
            if np.max(np.abs(step)) < 1e-12:
                break
        t += h
    assert t == pytest.approx(delay, rel=0.08)


def test_probing_an_ideal_output_needs_a_load_that_is_no_source():
    # two prescribed voltages in parallel: the structure check says so, see test_structure
    circuit = probed("opamp", {"plus": 0.0, "minus": 0.0, "out": 1.0, "high": 9.0, "low": 0.0})
    system = assemble(circuit)
    assert abs(np.linalg.det(system.jacobian(np.zeros(system.n)))) == 0.0
