"""Transients with exact answers. Formulas are textbook standard (from memory unless a source is named)."""

import numpy as np
import pytest
from moving_circuits import blinker, charging, free_tank, latch, series_tank

from loopsim.build import CircuitBuilder, waveform
from loopsim.devices.phi import Kind
from loopsim.numerics.radau import equations, integrate

TOLERANCES = [1e-4, 1e-6, 1e-8]


@pytest.mark.parametrize("tolerance", TOLERANCES)
def test_step_into_a_resistor_and_a_capacitor(tolerance: float) -> None:
    run = charging().transient(5e-3, start={"out": 0.0}, tolerance=tolerance)
    times = np.linspace(0.0, 5e-3, 101)
    assert np.allclose(run.at(times)["out"], 1.0 - np.exp(-times / 1e-3), rtol=0.0, atol=10.0 * tolerance)
    assert run.at(1e-3)["out"] == pytest.approx(0.6321205588285576784, abs=10.0 * tolerance)


@pytest.mark.parametrize("tolerance", TOLERANCES)
def test_step_into_a_series_tank(tolerance: float) -> None:
    run = series_tank(1.0).transient(1.0, start={"out": 0.0}, tolerance=tolerance)
    assert run.final("out") == pytest.approx(0.34029984660829833803, abs=10.0 * tolerance)


@pytest.mark.parametrize("tolerance", TOLERANCES)
def test_sine_into_a_resistor_and_a_capacitor(tolerance: float) -> None:
    run = charging(waveform("sine", amplitude=1.0, frequency=1e3)).transient(5e-3, start="A", tolerance=tolerance)
    w, tau, times = 2e3 * np.pi, 1e-3, np.linspace(0.0, 5e-3, 501)
    exact = (np.sin(w * times) - w * tau * np.cos(w * times) + w * tau * np.exp(-times / tau)) / (1.0 + (w * tau) ** 2)
    assert np.allclose(run.at(times)["out"], exact, rtol=0.0, atol=10.0 * tolerance)


@pytest.mark.parametrize("tolerance", TOLERANCES)
def test_square_wave_into_a_resistor_and_a_capacitor(tolerance: float) -> None:
    wave = waveform("square", high=1.0, period=4e-3, width=1.999e-3, rise=1e-6, fall=1e-6, delay=1e-3)
    run = charging(wave).transient(20e-3, start="A", tolerance=tolerance)

    def ramp_answer(t: np.ndarray) -> np.ndarray:  # of a source that rises by 1 V/s from t = 0
        return np.where(t > 0.0, t - 1e-3 * (1.0 - np.exp(-np.maximum(t, 0.0) / 1e-3)), 0.0)

    times = np.linspace(0.0, 20e-3, 801)
    exact = np.zeros_like(times)
    for k in range(5):
        rise, fall = 1e-3 + 4e-3 * k, 3e-3 + 4e-3 * k
        for corner, slope in ((rise, 1e6), (rise + 1e-6, -1e6), (fall, -1e6), (fall + 1e-6, 1e6)):
            exact += slope * ramp_answer(times - corner)
    assert np.allclose(run.at(times)["out"], exact, rtol=0.0, atol=10.0 * tolerance + 1e-9)
    corners = [1e-3, 1.001e-3, 3e-3, 3.001e-3]
    assert all(np.min(np.abs(run.times - corner)) <= 1e-15 for corner in corners)  # hit, not stepped over


@pytest.mark.parametrize("tolerance", TOLERANCES)
def test_a_tank_keeps_its_energy_over_a_thousand_periods(tolerance: float) -> None:
    run = free_tank().transient(2000.0 * np.pi, start={"out": 1.0}, tolerance=tolerance)
    volts, amperes = run["out"], run.current("l")
    energy = volts**2 + amperes**2
    # the method takes energy away a little every period: to the tolerance per radian at most
    assert abs(energy[-1] - 1.0) <= 2000.0 * np.pi * tolerance
    assert np.all(np.diff(energy) <= 1e-12)


@pytest.mark.parametrize("tolerance", TOLERANCES)
def test_a_capacitor_empties_through_a_diode_over_ten_decades_of_time(tolerance: float) -> None:
    saturation, thermal, capacitance, start = 1e-12, 0.025, 1e-9, 0.6
    table = {  # recomputed with extended precision
        1e-9: 0.58193763150795525037,
        1e-6: 0.42583607660747547285,
        1e-3: 0.25316625400048389893,
        1.0: 0.080970228954134164994,
        25.0: 0.011466878634127787183,
    }
    eq = equations(
        np.array([[capacitance]]), np.zeros((1, 1)), np.array([[saturation]]), np.array([[1.0 / thermal]]), [0.0], [Kind.EXPONENTIAL]
    )
    path = integrate(eq, [start], 0.0, 25.0, [0.0], rtol=tolerance, atol=tolerance * 1e-3, first_step=1e-12)
    for time, volts in table.items():
        assert path.at(time)[0, 0] == pytest.approx(volts, rel=10.0 * tolerance)


@pytest.mark.parametrize("tolerance", TOLERANCES)
def test_leaving_an_unstable_point(tolerance: float) -> None:
    # x' = x - x^3 from 0.001: x(t) = x0 e^t / sqrt(1 - x0^2 + x0^2 e^(2t)), the exact model of a metastable latch
    eq = equations(np.eye(1), np.zeros((1, 1)), np.eye(1), np.eye(1), [0.0], [Kind.POLYNOMIAL], np.array([[-1.0, 0.0, 1.0]]))
    path = integrate(eq, [1e-3], 0.0, 20.0, [0.0], rtol=tolerance, atol=1e-4 * tolerance)
    for time, value in {1.0: 0.0027182731448731077872, 5.0: 0.14680523781179200429, 10.0: 0.99897101461754158164}.items():
        assert path.at(time)[0, 0] == pytest.approx(value, rel=20.0 * tolerance)
    assert path.end_x[0] == pytest.approx(0.999999999997875825, abs=10.0 * tolerance)


def test_a_latch_escapes_with_the_time_constant_of_its_positive_eigenvalue() -> None:
    circuit = latch()
    middle = circuit.states()["B"]
    rate = middle.growth_rate
    assert rate == pytest.approx((2.0 * 2e-3 - 1e-3) / 1e-9, rel=1e-9)  # (gm - G) / C: Veendrick 1980 (from memory)
    run = circuit.transient(8e-6, start=middle, nudge=1e-7, tolerance=1e-8)
    # at 0.1 mV and 10 mV the saturation is not felt to five digits: ln(100) time constants lie between
    first = run.crossings("flag", 1e-4, "rising")[0].time
    second = run.crossings("flag", 1e-2, "rising")[0].time
    assert (second - first) * rate == pytest.approx(np.log(100.0), rel=1e-4)


def test_relaxation_period_is_the_ideal_one_plus_the_time_to_slew() -> None:
    # T = 2 R C ln((1 + b) / (1 - b)) with b = 1/2 (common practice); each edge also takes the output from rail to rail
    found = blinker(slew_rate=13e6).cycle()
    ideal = 2.0 * 10e3 * 100e-9 * np.log(3.0)
    slewing = 2.0 * found.swing("out") / 13e6
    # resistances at the output and the rounding of the rails (0.3 %) come on top
    assert ideal < found.period < ideal * 1.003 + 3.0 * slewing
    slow = blinker(slew_rate=0.5e6).cycle()
    extra = 2.0 * slow.swing("out") / 0.5e6 - slewing
    assert slow.period - found.period == pytest.approx(extra, rel=0.35)


@pytest.mark.parametrize("stages", [3, 5, 7])
def test_observed_order_by_halving_a_fixed_step(stages: int) -> None:
    # x'' = -x for 8 s: smooth and not stiff; x(8) = cos 8
    eq = equations(np.eye(2), np.array([[0.0, -1.0], [1.0, 0.0]]), np.zeros((2, 0)), np.zeros((0, 2)), [], [])
    base = {3: 0.5, 5: 1.0, 7: 4.0}[stages]
    errors = []
    for k in range(2):
        path = integrate(eq, [1.0, 0.0], 0.0, 8.0, [0.0, 0.0], fixed_step=base / 2**k, stages=stages)
        assert path.accepted == round(8.0 / base * 2**k)
        errors.append(np.hypot(path.end_x[0] - np.cos(8.0), path.end_x[1] + np.sin(8.0)))
    assert np.log2(errors[0] / errors[1]) == pytest.approx(2 * stages - 1, abs=0.5)


def test_supplies_that_come_up_in_sequence_by_their_own_waveforms() -> None:
    b = CircuitBuilder("two_supplies")
    b.chain("gnd", "first", "a", device="voltage_source", voltage=waveform("ramp", to=2.0, duration=1e-3, start=0.0))
    b.chain("gnd", "second", "b", device="voltage_source", voltage=waveform("ramp", to=3.0, duration=1e-3, start=5e-3))
    b.chain("a", "r_a", "out", device="resistor", resistance=1e3)
    b.chain("b", "r_b", "out", device="resistor", resistance=1e3)
    b.chain("out", "c", "gnd", device="capacitor", capacitance=1e-7)
    run = b.circuit().transient(10e-3, start="off", ramp=1e-9, tolerance=1e-7)
    assert run.at(4.9e-3)["out"] == pytest.approx(1.0, abs=1e-6)
    assert run.final("out") == pytest.approx(2.5, abs=1e-6)
