"""Starts, ends, crossings, failures and forms of a transient."""

import json
import signal

import numpy as np
import pytest
from moving_circuits import blinker, charging, follower, latch, negative_conductance, series_tank, trigger

import loopsim
from loopsim.analyses.transient import TransientError, TransientInterrupted
from loopsim.build import CircuitBuilder, waveform
from loopsim.errors import AnalysisError, CircuitError


def test_supplies_come_up_together_within_the_stated_ramp() -> None:
    run = charging().transient(10e-3, ramp=1e-3, tolerance=1e-6)
    # the answer to a ramp of 1 ms into a time constant of 1 ms
    assert run.at(0.5e-3)["feed"] == pytest.approx(0.5)
    assert run.at(1e-3)["out"] == pytest.approx(np.exp(-1.0), abs=1e-5)
    assert run.end_state == "A" and run.end == "ends in state A"
    assert any("1 ms" in note for note in run.notes)


def test_a_stable_state_stays_where_it_is() -> None:
    points = latch().states()
    run = latch().transient(1e-4, start=points["C"])
    assert run.end_state == "C"
    assert np.allclose(run["flag"], points["C"]["flag"], rtol=0.0, atol=1e-9)


def test_a_nudge_chooses_the_side_to_which_an_unstable_state_falls() -> None:
    ends = {sign: latch().transient(40e-6, start="B", nudge=sign * 1e-6) for sign in (1.0, -1.0)}
    assert {ends[1.0].end_state, ends[-1.0].end_state} == {"A", "C"}
    assert all("growing" in run.notes[0] for run in ends.values())


def test_an_unstable_state_left_alone_ends_in_itself() -> None:
    assert latch().transient(1e-6, start="B").end_state == "B"


def test_net_voltages_start_capacitors_charged_and_the_rest_at_rest() -> None:
    run = latch().transient(40e-6, start={"flag": 0.5, "inverse": 0.1})
    assert run["flag"][0] == pytest.approx(0.5, abs=1e-6) and run["inverse"][0] == pytest.approx(0.1, abs=1e-6)
    assert run.final("flag") > 1.9


def test_a_net_held_by_a_source_cannot_start_elsewhere() -> None:
    with pytest.raises(AnalysisError, match="feed cannot start at 2 V") as caught:
        charging().transient(1e-3, start={"feed": 2.0})
    assert caught.value.code == "start"


def test_inductors_start_without_current() -> None:
    run = series_tank(0.5).transient(1.0, start={"out": 0.25})
    assert run.current("l")[0] == pytest.approx(0.0, abs=1e-9)
    assert run["out"][0] == pytest.approx(0.25, abs=1e-9)


@pytest.mark.parametrize(
    ("options", "code"),
    [
        ({"start": "Q"}, "start"),
        ({"start": {"nowhere": 1.0}}, "unknown-net"),
        ({"watch": "nowhere"}, "unknown-net"),
        ({"tolerance": 0.0}, "tolerance"),
        ({"ramp": -1.0}, "ramp"),
        ({"start": "A", "nudge": 1e-3}, "nudge"),
        ({"nudge": float("nan")}, "nudge"),
    ],
)
def test_a_faulty_question_is_told_so(options: dict[str, object], code: str) -> None:
    with pytest.raises(AnalysisError) as caught:
        charging().transient(1e-3, **options)
    assert caught.value.code == code


@pytest.mark.parametrize("duration", [0.0, -1.0, float("inf"), float("nan")])
def test_a_duration_must_be_a_positive_time(duration: float) -> None:
    with pytest.raises(AnalysisError, match="duration"):
        charging().transient(duration)


def test_an_unknown_let_is_an_error_of_the_circuit() -> None:
    with pytest.raises(CircuitError, match="unknown-let"):
        charging().transient(1e-3, nosuch=1.0)


def test_crossings_lie_on_the_curve_and_name_their_direction() -> None:
    run = charging(waveform("sine", amplitude=1.0, frequency=1e3)).transient(3e-3, start="A", tolerance=1e-8)
    found = run.crossings("feed", 0.5)
    exact = [t for k in range(3) for t in (1e-3 * k + 1e-3 / 12, 1e-3 * k + 5e-3 / 12)]
    assert [c.time for c in found] == pytest.approx(exact, rel=1e-5)
    assert [c.direction for c in found] == ["rising", "falling"] * 3
    assert [c.time for c in run.crossings("feed", 0.5, "falling")] == pytest.approx(exact[1::2], rel=1e-5)
    assert run.crossings("feed", 2.0) == ()


def test_the_curve_between_steps_is_as_good_as_at_them() -> None:
    run = charging().transient(5e-3, start={"out": 0.0}, tolerance=1e-8)
    between = 0.5 * (run.times[1:] + run.times[:-1])
    assert np.allclose(run.at(between)["out"], 1.0 - np.exp(-between / 1e-3), rtol=0.0, atol=1e-8)


def test_outside_the_run_nothing_is_said() -> None:
    run = charging().transient(1e-3)
    with pytest.raises(AnalysisError, match="covers"):
        run.at(2e-3)
    with pytest.raises(AnalysisError, match="no net nowhere"):
        run["nowhere"]


def test_an_oscillation_is_named_with_its_period() -> None:
    run = negative_conductance(1.0).transient(100.0, start={"out": 0.1}, tolerance=1e-8)
    assert run.end.startswith("oscillates") and run.end_state is None
    assert float(run.end.split()[-2]) == pytest.approx(6.66328685932313, rel=1e-5)


def test_what_a_source_drives_is_still_moving() -> None:
    run = charging(waveform("sine", amplitude=1.0, frequency=1e3)).transient(20e-3, start="A")
    assert run.end == "still moving"


def test_a_source_that_has_moved_leaves_no_state_of_time_zero() -> None:
    run = charging(waveform("ramp", to=1.0, duration=1e-3)).transient(20e-3, start="A")
    assert run.end == "settles" and run.end_state is None and "moved away" in run.notes[-1]
    assert run.final("out") == pytest.approx(1.0, abs=1e-4)


def test_a_slewing_amplifier_rises_at_its_slew_rate() -> None:
    run = follower(waveform("ramp", **{"from": -4.0, "to": 4.0, "duration": 1e-9, "start": 5e-6})).transient(60e-6, start="A")
    low, high = run.crossings("out", -2.0, "rising")[0].time, run.crossings("out", 2.0, "rising")[0].time
    assert 4.0 / (high - low) == pytest.approx(0.5e6, rel=0.01)
    assert run.final("out") == pytest.approx(4.0, abs=1e-3)


def test_a_slowly_driven_comparator_jumps_at_its_traced_threshold_within_the_delay_it_is_allowed() -> None:
    rate = 5.0 / 50e-3  # V/s of the ramp
    run = trigger(waveform("ramp", **{"from": -5.0, "to": 5.0, "duration": 100e-3})).transient(100e-3, start="A", tolerance=1e-7)
    jump = run.crossings("out", 0.0, "rising")[0].time
    threshold = -5.0 + rate * jump
    # the lower branch ends where plus reaches minus: v R_fb / (R_in + R_fb) = 5 V R_in / (R_in + R_fb), within the rail's softness
    assert threshold == pytest.approx(2.5, abs=0.02)
    # and from there the output needs its slewing time and the growth of a start from the ramp's own speed
    later = run.crossings("out", 4.0, "rising")[0].time - run.crossings("out", -4.0, "rising")[0].time
    assert 8.0 / 1e6 * 0.9 < later < 8.0 / 1e6 + 20e-6


def test_settling_time_of_a_charging_capacitor() -> None:
    run = charging().transient(20e-3, start={"out": 0.0}, tolerance=1e-7)
    assert run.settling_time("out", 0.01) == pytest.approx(1e-3 * np.log(100.0), rel=1e-4)


def test_sharp_corners_far_apart_are_all_hit() -> None:
    pulses = waveform("square", high=1.0, period=10e-3, width=1e-9, rise=1e-9, fall=1e-9, delay=1e-3)
    run = charging(pulses).transient(95e-3, start="A", tolerance=1e-6)
    tops = [c.time for c in run.crossings("feed", 0.5, "rising")]
    assert tops == pytest.approx([1e-3 + 10e-3 * k + 0.5e-9 for k in range(10)], rel=1e-9)
    # each pulse carries 2 ns V into 1 kohm and 1 uF
    assert run.at(1e-3 + 4e-9)["out"] == pytest.approx(2e-6, rel=1e-3)


def test_a_loop_without_delay_stops_with_its_good_steps_and_says_where() -> None:
    b = CircuitBuilder("instant")
    b.chain("gnd", "probe", "sense", device="current_source", current=waveform("ramp", to=2e-3, duration=1e-3))
    curve = b.curve("falling", "polynomial", [3e-3, -4.5e-3, 2e-3])
    b.chain("sense", "d", "gnd", device="curve_conductance", curve=curve)
    b.chain("gnd", "cell", "feed", device="voltage_source", voltage=1.0)
    b.chain("feed", "r", "out", device="resistor", resistance=1e3)
    b.chain("out", "c", "gnd", device="capacitor", capacitance=1e-7)
    with pytest.raises(TransientError) as caught:
        b.circuit().transient(1e-3, start={"out": 0.0})
    error = caught.value
    # the curve folds where 3 - 9 v + 6 v^2 = 0: at v = 0.5 V, i = 0.625 mA
    assert error.code == "step-too-small" and "net sense" in str(error)
    assert error.partial is not None and error.partial.steps > 5
    assert error.partial.times[-1] == pytest.approx(0.3125e-3, rel=1e-3)
    assert error.last_good["sense"] == pytest.approx(0.5, abs=0.02)
    assert not error.partial.completed and np.all(np.isfinite(error.partial["out"]))


def test_progress_is_told_and_ends_at_one() -> None:
    seen: list[float] = []
    blinker().transient(20e-3, progress=seen.append)
    assert seen == sorted(seen) and seen[-1] == pytest.approx(1.0)


def test_an_interrupted_run_keeps_its_good_steps() -> None:
    whole = blinker().transient(20e-3)

    def stop(share: float) -> None:
        signal.raise_signal(signal.SIGINT)

    with pytest.raises(KeyboardInterrupt) as caught:
        blinker().transient(20e-3, progress=stop)
    assert isinstance(caught.value, TransientInterrupted)
    part = caught.value.partial
    assert not part.completed and part.end == "stopped early"
    assert 0 < part.steps < whole.steps and len(part.times) == part.steps + 1
    assert np.array_equal(part["out"], whole["out"][: part.steps + 1])
    assert f"after {part.steps} steps" in str(caught.value)


def test_an_interrupt_in_the_middle_of_an_uncompiled_step_keeps_the_steps_before(monkeypatch: pytest.MonkeyPatch) -> None:
    from loopsim.devices import phi
    from loopsim.numerics import radau

    # 20 cells of a line: more unknowns than the full factors take, so that whole-array operations run without a compiler
    b = CircuitBuilder("line")
    b.chain("gnd", "feed", "n0", device="voltage_source", voltage=1.0)
    for k in range(20):
        b.chain(f"n{k}", f"r{k}", f"n{k + 1}", device="resistor", resistance=1e3)
        b.chain(f"n{k + 1}", f"c{k}", "gnd", device="capacitor", capacitance=1e-9)
        b.chain(f"n{k + 1}", f"d{k}", "gnd", device="diode", saturation_current=1e-12)
    line = b.circuit()
    monkeypatch.setattr(radau, "have_compiler", lambda: False)
    calls = 0
    value = phi.VALUE[phi.Kind.EXPONENTIAL]

    def counted(w: np.ndarray, p: np.ndarray) -> np.ndarray:
        nonlocal calls
        calls += 1
        if calls == 150:
            raise KeyboardInterrupt
        return value(w, p)

    monkeypatch.setattr(phi, "VALUE", (counted, *phi.VALUE[1:]))
    with pytest.raises(TransientInterrupted) as caught:
        line.transient(1e-3)
    part = caught.value.partial
    assert part.steps > 5 and part.times[-1] < 1e-3
    assert np.all(np.diff(part.times) > 0.0) and np.all(np.isfinite(part["n20"]))


def test_a_result_prints_as_an_answer_and_as_data() -> None:
    run = charging().transient(10e-3, ramp=1e-6, watch="out")
    assert "ends in state A" in str(run) and "out" in str(run) and "feed" not in str(run).split("net", 1)[1]
    data = json.loads(json.dumps(run.to_dict(), allow_nan=False))
    assert data["end_state"] == "A" and list(data["nets"]) == ["out"]
    assert len(data["times"]) == len(data["nets"]["out"]) == run.steps + 1
    assert repr(run).startswith("Transient(charging:")


def test_a_table_has_equal_steps() -> None:
    times, nets = charging().transient(1e-3).table(11)
    assert np.allclose(np.diff(times), 1e-4) and set(nets) == {"feed", "out"} and len(nets["out"]) == 11


def test_a_run_does_not_rest_on_an_unstable_point_because_its_steps_are_long() -> None:
    # in long steps the growth of a tuned circuit with a negative conductance would look like a decay
    b = CircuitBuilder("beacon")
    b.chain("gnd", "bias", "feed", device="voltage_source", voltage=0.21)
    b.chain("feed", "r", "tap", device="resistor", resistance=10.0)
    b.chain("tap", "l", "top", device="inductor", inductance=1e-6)
    b.chain("top", "c", "gnd", device="capacitor", capacitance=1e-9)
    curve = b.curve("falling", "polynomial", [45e-3, -305e-3, 540e-3])
    b.chain("top", "d", "gnd", device="curve_conductance", curve=curve)
    run = b.circuit().transient(0.5e-3)
    assert run.end.startswith("oscillates")
    # ten times as long it would be too many steps: then the run says what it did not see
    longer = b.circuit().transient(50e-3)
    assert longer.end.startswith("oscillates") or any("unstable" in note for note in longer.notes)


RAILS_THAT_CROSS = """circuit kiln_release "a comparator from nothing"
gnd -> rail: 5 V -> vcc
vcc -- r_delay: 100 kohm -- ramp -- c_delay: 1 uF -- gnd
vcc -- r_top: 22 kohm -- half -- r_bottom: 22 kohm -- gnd
kind decider = comparator(gain = 100 dB, propagation_delay = 300 ns, output = push_pull, headroom = 50 mV)
u1: decider(plus = ramp, minus = half, out = run, high = vcc, low = gnd)
"""


@pytest.mark.parametrize("tolerance", [1e-4, 1e-5, 1e-6])
def test_a_comparator_comes_up_through_the_point_where_its_limits_cross(tolerance: float) -> None:
    """Below 0.1 V of supply both limits of the output hold it between them; then it must follow the lower one. The first step that
    meets that knee may not be believed after one change of Newton, however well the steps before it went."""
    run = loopsim.parse(RAILS_THAT_CROSS).transient(1.0, tolerance=tolerance)
    assert run.completed
    held = run.at(np.array([0.02, 0.05]))["run"]
    assert held == pytest.approx([0.05, 0.05], abs=8e-3)  # the lower limit: headroom above low, and a few knees of 1 mV
    assert run.final("run") == pytest.approx(4.95, abs=0.01)
