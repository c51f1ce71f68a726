"""Sustained oscillations: period, shape, multipliers, and what is none."""

import json

import numpy as np
import pytest
from moving_circuits import blinker, charging, latch, negative_conductance

from loopsim.analyses.cycle import cycle, cycles, step_product
from loopsim.analyses.motion import motion
from loopsim.build import CircuitBuilder, waveform
from loopsim.equations.assemble import assemble
from loopsim.errors import AnalysisError

PERIODS = {  # of van der Pol's equation, recomputed in 113-bit arithmetic; for 1: Hairer, Norsett, Wanner, Solving ODE I
    0.1: 6.2871112722886656075,
    1.0: 6.66328685932313018969968202,
    10.0: 19.078369566939014070,
    100.0: 162.83707109237001213,
}


@pytest.mark.parametrize("mu", PERIODS)
def test_period_of_the_negative_conductance_oscillator(mu: float) -> None:
    found = negative_conductance(mu).cycle()
    assert found.period == pytest.approx(PERIODS[mu], rel=2e-8)
    assert found.exact and found.stable and found.verdict == "stable cycle"
    assert found.frequency == 1.0 / found.period


def test_the_multiplier_of_a_weak_oscillator() -> None:
    # to first order in mu the amplitude disturbance dies as exp(-mu t): averaging (from memory)
    found = negative_conductance(0.1).cycle()
    assert found.multipliers[0].real == pytest.approx(np.exp(-0.1 * found.period), rel=0.01)
    assert found.shift_error < 1e-6


def test_amplitude_swing_and_duty() -> None:
    found = negative_conductance(1.0).cycle()
    low, high = found.extremes("out")
    assert high == pytest.approx(2.00861986087484, rel=1e-9) and low == pytest.approx(-high, rel=1e-9)
    assert found.swing("out") == high - low
    assert found.duty("out") == pytest.approx(0.5, abs=1e-6)


def test_one_period_closes() -> None:
    found = negative_conductance(2.0).cycle()
    assert found.at(0.0)["out"] == pytest.approx(found.at(found.period * 0.9999999999)["out"], abs=1e-6)
    assert found.at(3.25 * found.period)["out"] == pytest.approx(found.at(0.25 * found.period)["out"], abs=1e-9)
    assert found["out"][0] == pytest.approx(found["out"][-1], abs=1e-6)


def test_the_derivative_of_a_run_agrees_with_differences() -> None:
    system = assemble(negative_conductance(1.0))
    x = np.array([1.5, 0.4])
    plan = motion(system, x, 3.0)
    path = plan.solve(x, 0.0, 3.0, 1e-9)
    exact = step_product(system, path)
    size = 1e-5
    columns = []
    for j in range(2):
        ends = [plan.solve(x + sign * size * np.eye(2)[j], 0.0, 3.0, 1e-9).end_x for sign in (1.0, -1.0)]
        columns.append((ends[0] - ends[1]) / (2.0 * size))
    assert np.allclose(exact, np.column_stack(columns), rtol=0.0, atol=1e-6)


def test_a_relaxation_oscillator_is_strongly_stable() -> None:
    found = blinker().cycle(watch=["out", "minus"])
    assert found.stable and abs(found.multipliers[0]) < 1e-3
    # minus swings between the thresholds at half of what out reaches
    assert found.swing("minus") == pytest.approx(0.5 * found.swing("out"), rel=0.01)
    assert found.duty("out") == pytest.approx(0.5, abs=1e-3)


def test_a_circuit_that_comes_to_rest_has_no_cycle() -> None:
    with pytest.raises(AnalysisError, match="comes to rest") as caught:
        charging().cycle()
    assert caught.value.code == "no-cycle"
    with pytest.raises(AnalysisError, match="comes to rest"):
        latch().cycle()


def test_a_driven_circuit_is_not_asked_for_its_own_cycle() -> None:
    with pytest.raises(AnalysisError) as caught:
        charging(waveform("sine", amplitude=1.0, frequency=1e3)).cycle()
    assert caught.value.code == "driven"


def test_several_starts_on_one_cycle_are_one() -> None:
    found = cycles(negative_conductance(1.0), [{"out": 0.1}, {"out": 3.0}, "off"])
    assert len(found) == 1


def test_two_cycles_are_told_apart() -> None:
    # averaging (from memory): i = sum a_k v^k lets the amplitude A of a tuned circuit grow as -(A / 2) g(A^2), g(z) = a1 + (3/4) a3 z +
    # (5/8) a5 z^2 + (35/64) a7 z^3; g = k (z - 1)(z - 4)(z - 9) has stable cycles of amplitude 1 and 3 and an unstable one of 2 between
    b = CircuitBuilder("two_tones")
    b.chain("out", "c", "gnd", device="capacitor", capacitance=1.0)
    b.chain("out", "l", "gnd", device="inductor", inductance=1.0)
    k = 1e-3
    values = [-36.0 * k, 0.0, 49.0 * k / 0.75, 0.0, -14.0 * k / 0.625, 0.0, k * 64.0 / 35.0]
    b.chain("out", "d", "gnd", device="curve_conductance", curve=b.curve("wavy", "polynomial", values))
    found = cycles(b.circuit(), [{"out": 0.1}, {"out": 3.5}, {"out": 1.5}, {"out": 2.5}])
    amplitudes = sorted(0.5 * one.swing("out") for one in found)
    assert amplitudes == pytest.approx([1.0, 3.0], rel=0.01)
    assert all(one.stable for one in found)


def test_the_search_ends_when_it_has_looked_long_enough() -> None:
    with pytest.raises(AnalysisError) as caught:
        cycle(negative_conductance(0.1), start={"out": 0.01}, duration=1.0)
    assert caught.value.code == "no-repetition"


def test_the_search_tells_how_much_of_its_budget_is_used() -> None:
    seen: list[float] = []
    blinker().cycle(progress=seen.append, budget=50.0)
    assert seen and seen == sorted(seen) and seen[0] > 0.0 and seen[-1] <= 1.0


def test_a_cycle_prints_as_an_answer_and_as_data() -> None:
    found = negative_conductance(1.0).cycle()
    assert "period 6.663287 s" in str(found) and "stable cycle" in str(found)
    data = json.loads(json.dumps(found.to_dict(), allow_nan=False))
    assert data["period"] == found.period and data["swing"]["out"] == found.swing("out")
