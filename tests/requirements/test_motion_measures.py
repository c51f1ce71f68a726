"""Measures of a motion: what a run in time shows is `simulated`, never proved, and no run that does not end decides anything."""

import math
from dataclasses import replace

import numpy as np
import pytest
from asking import PUMP, asked, library, one

from loopsim.errors import AnalysisError
from loopsim.requirements import oscillation
from loopsim.requirements.computed import Computed

# charging through 1 kohm, 1 uF: time constant 1 ms
CHARGED = """
circuit charged "A capacitor charged by a step"
let level = 5 V
gnd -> source: ramp(from = 0 V, to = level, start = 1 ms, duration = 1 us) -> top -- r: 1 kohm -- store -- c: 1 uF -- gnd
"""

BLINKER = """
circuit blinker "Relaxation oscillator"
kind amp = opamp(gain = 100 dB, gain_bandwidth = 1 MHz, slew_rate = 10 V/us)
let top_resistor = 10 kohm
gnd -> upper: 5 V -> vcc
gnd -> lower: -5 V -> vee
out -- r_a: top_resistor -- plus -- r_b: 10 kohm -- gnd
out -- r_t: 10 kohm -- minus -- c_t: 100 nF -- gnd
u1: amp(plus = plus, minus = minus, out = out, high = vcc, low = vee)
"""
PERIOD = 2.0 * 1e-3 * math.log(3.0)  # closed form, symmetric rails and a half fed back: 2 R C ln 3


@pytest.mark.parametrize(
    ("line", "value"),
    [
        ("period = 2.2 ms +/- 50 us", PERIOD),
        ("frequency of out = 455 Hz +/- 10 Hz", 1.0 / PERIOD),
        ("duty of out = 50 % +/- 1 %", 0.5),
        ("swing of out = 10 V +/- 0.1 V", 10.0),
        ("swing of minus = 5 V +/- 0.1 V from off", 5.0),
    ],
)
def test_an_oscillation_has_the_numbers_of_its_closed_form(line, value):
    outcome = one(BLINKER, f"expect {line}")
    assert (outcome.outcome, outcome.proof) == ("met", "simulated")
    assert outcome.measured == (pytest.approx(value, rel=2e-2),)


def test_a_wrong_period_is_violated_with_the_cycle_it_was_read_from():
    outcome = one(BLINKER, "expect period < 2 ms")
    assert (outcome.outcome, outcome.proof) == ("violated", "simulated")
    assert "stable cycle" in outcome.note
    assert outcome.margin == pytest.approx(2e-3 - PERIOD, rel=5e-2)


def test_a_simulated_number_is_no_proof():
    strict = one(BLINKER, "expect period = 2.2 ms +/- 50 us", require_proof=True)
    assert (strict.outcome, strict.note) == ("undecided", "met, but only simulated: not proved")


def test_where_nothing_oscillates_a_period_is_violated_and_the_swing_is_nothing():
    period, small, large = asked(PUMP, "expect period < 1 s", "expect swing of out < 1 mV", "expect swing of out > 1 V")
    assert (period.outcome, small.outcome, large.outcome) == ("violated", "met", "violated")
    assert "comes to rest at" in period.note
    assert small.measured == (0.0,)


def test_a_net_that_takes_no_part_has_no_period():
    outcome = one(BLINKER, "expect frequency of vcc > 1 Hz")
    assert (outcome.outcome, outcome.note) == ("violated", "vcc does not move in the oscillation")


def test_a_source_that_moves_leaves_a_period_undecided():
    text = 'circuit driven "Driven"\ngnd -> s: sine(amplitude = 1 V, frequency = 50 Hz) -> a -- r: 1 kohm -- b -- c: 1 uF -- gnd\n'
    period, final = asked(text, "expect period of b = 20 ms +/- 1 ms", "expect final value of b < 1 V")
    assert (period.outcome, final.outcome) == ("undecided", "undecided")
    assert "driven" in period.note
    assert "never comes to rest" in final.note


def test_a_net_that_repeats_twice_in_the_period_has_half_of_it():
    class Doubled:
        period = 2.0

        def at(self, times):
            first, second = (np.sin(k * 2.0 * np.pi * times / self.period) for k in (1, 2))
            return {"once": first, "twice": second, "both": first + 2.0 * second}

    assert [oscillation.repeats(Doubled(), net) for net in ("once", "twice", "both")] == [1, 2, 1]


def test_settling_of_a_charged_capacitor_is_that_of_its_closed_form():
    time, final = asked(CHARGED, "expect settling time of store = 5.6 ms +/- 50 us", "expect final value of store = 5 V +/- 10 mV")
    assert (time.outcome, final.outcome, time.proof) == ("met", "met", "simulated")
    assert time.measured[0] == pytest.approx(1e-3 + 1e-3 * math.log(100.0), rel=1e-3)  # closed form, 1 % of the step left
    assert final.measured[0] == pytest.approx(5.0, abs=1e-3)


def test_settling_outside_its_limit_is_violated():
    outcome = one(CHARGED, "expect settling time of store < 5 ms")
    assert (outcome.outcome, outcome.note.split(":")[0]) == ("violated", "from state A")


def test_a_start_state_holds_for_fast_and_slow_supplies_or_names_the_ramp_that_fails():
    wanted = next(r for r in library("hive_bias_awake").requirements if r.measure == "start state")
    (awake,) = replace(library("hive_bias_awake"), requirements=(wanted,)).verify()
    (asleep,) = replace(library("hive_bias_asleep"), requirements=(wanted,)).verify()
    assert awake.outcome == "met"
    # a fast ramp wakes it through its capacitor, a slow one does not: the file says that it sleeps
    assert asleep.outcome == "violated"
    assert max(asleep.measured) > 0.5
    assert "supplies came up together within" in asleep.note


def test_a_start_from_a_state_is_that_state():
    outcome = one(PUMP, "expect final value of out > 8 V from C")
    assert (outcome.outcome, outcome.proof) == ("met", "simulated")
    assert one(PUMP, "expect final value of out > 8 V from A").outcome == "violated"
    unknown = one(PUMP, "expect final value of out > 8 V from Q")
    assert (unknown.outcome, unknown.note[:27]) == ("undecided", "start: there is no state Q")


def test_a_run_that_rests_on_an_unstable_point_decides_nothing():
    outcome = one(PUMP, "expect final value of out in 4 V .. 5 V from B")
    assert outcome.outcome == "undecided"
    assert "unstable" in outcome.note


def test_which_of_several_stable_states_a_waveform_starts_in_has_to_be_said():
    text = PUMP.replace("gnd -> probe: level", "gnd -> probe: ramp(from = level, to = 8 V, start = 1 us, duration = 1 ms)")
    open_start, said = asked(text, "expect final value of out > 8 V", "expect final value of out > 8 V from A")
    assert (open_start.outcome, said.outcome) == ("undecided", "met")
    assert "say `from`" in open_start.note


def test_a_motion_without_rest_violates_what_asks_for_one():
    outcome = one(BLINKER, "expect start state of out = 0 V +/- 1 V from off")
    assert outcome.outcome == "violated"
    assert "never comes to rest" in outcome.note


def test_the_time_budget_ends_a_run():
    computed = Computed(library("cistern_blinker"), 1e3, 1e-9)
    with pytest.raises(AnalysisError, match="budget"):
        computed.cycle("off", {})
