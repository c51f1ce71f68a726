"""Each measure each way: met, violated with its place, undecided with its reason."""

from dataclasses import replace

import pytest
from asking import DIVIDER, PUMP, asked, library, one

import loopsim
from loopsim.analyses.trace import trace
from loopsim.requirements.jumps import judge_trace
from loopsim.requirements.limits import limits_of
from loopsim.requirements.measures import SERVERS
from loopsim.requirements.proof import ENOUGH, weakest

RISING = "expect rising threshold of out along level"

# an amplifier of gain -2 with a pole; its one state is stable
INVERTER = """
circuit inverter "Gain of minus two"
kind amp = opamp(gain = 100 dB, gain_bandwidth = 1 MHz)
let level = 0.5 V in -1 V .. 1 V
let feedback = 20 kohm
gnd -> upper: 5 V -> vcc
vee -> lower: 5 V -> gnd
gnd -> source: level -> top
top -- r_in: 10 kohm -- minus -- r_fb: feedback -- out
u1: amp(plus = gnd, minus = minus, out = out, high = vcc, low = vee)
"""


@pytest.mark.parametrize(
    ("line", "outcome", "proof"),
    [
        ("states = 3", "met", "proved"),
        ("states = 1", "violated", "proved"),
        ("states < 3", "violated", "proved"),
        ("states in 2 .. 3", "met", "proved"),
        ("stable states = 2", "met", "complete list"),
        ("unstable states = 2", "violated", "complete list"),
        ("values of mid = 4.5 V +/- 1 uV", "met", "proved"),
        ("values of out in stable states = { 0 V +/- 50 mV, 9 V +/- 50 mV }", "met", "proved"),
        ("values of out in stable states = { 0 V +/- 50 mV }", "violated", "proved"),
        ("values of out = { 0 V +/- 50 mV, 4.5 V +/- 0.5 V, 7 V +/- 10 mV, 9 V +/- 50 mV }", "violated", "proved"),
        ("values of plus - mid in stable states in -1 V .. 1 V", "met", "complete list"),
        ("values of current(r_fb) in stable states in -0.1 mA .. 0.1 mA", "met", "complete list"),
        ("growth rate > 0 Hz", "violated", "complete list"),
        ("damping > 0.5", "violated", "complete list"),
        ("damping in stable states > 0.5", "met", "complete list"),
        ("phase margin > 45", "undecided", ""),
        ("values of sqrt((mid - vcc) / vcc) = 1", "undecided", ""),
        ("values of mid / (supply - vcc) > 1", "undecided", ""),
        ("values of mid > supply / (supply - 9 V) * 1 V", "undecided", ""),
        ("states = 3 at level = supply / (supply - 9 V) * 1 V", "undecided", ""),
        ("rising threshold of gnd along level > 1 V", "undecided", ""),
        ("final value of gnd = 0 V", "undecided", ""),
        ("rising threshold of (out) along level > 5 V", "met", "complete at 11 stations"),
    ],
)
def test_measures_of_states(line, outcome, proof):
    found = one(PUMP, f"expect {line}")
    assert (found.outcome, found.proof) == (outcome, proof)
    assert bool(found.note) == (outcome != "met")
    assert (found.to_dict()["outcome"], found.to_dict()["proof"]) == (outcome, proof)


def test_a_violated_number_says_in_which_state_and_by_how_much():
    outcome = one(PUMP, "expect values of out in stable states < 5 V")
    assert outcome.outcome == "violated"
    assert outcome.note.startswith("state C (stable): 8.9")
    assert outcome.margin == pytest.approx(5.0 - 8.98, abs=0.01)


def test_a_pair_of_a_set_that_no_state_hits_is_named():
    outcome = one(PUMP, "expect values of out = { 0 V +/- 50 mV, 4.5 V +/- 0.5 V, 7 V +/- 10 mV, 9 V +/- 50 mV }")
    assert outcome.note == "no state in 6.99 .. 7.01 V"


def test_every_binding_is_judged_and_the_worst_is_told():
    outcome = one(PUMP, "expect states = 1 at level = 1 V, 4.5 V, 8 V")
    assert outcome.outcome == "violated"
    assert outcome.note.startswith("at level = 4.5 V: A stable")
    both = one(PUMP, "expect values of mid = 3 V +/- 1.6 V at supply = 6 V, 9 V, level = 1 V")
    assert (both.outcome, both.margin) == ("met", pytest.approx(0.1, abs=1e-6))


@pytest.mark.parametrize(
    ("line", "value"),
    [
        ("slope of out along level = -2 +/- 0.01", -2.0),
        ("slope of out / 2 + top along level = 0 +/- 0.01", 0.0),
        ("slope of level * out along level = -2 V +/- 0.01 V", -2.0),  # d (level out) / d level = out + level slope = -1 - 1
        ("slope of current(r_in) along level = 0.1 mS +/- 1 uS", 1e-4),
        ("slope of out along feedback = -50 uA +/- 1 uA", -5e-5),  # d out / d R = -level / 10 kohm
    ],
)
def test_slope_is_that_of_the_closed_form(line, value):
    outcome = one(INVERTER, f"expect {line}")
    assert (outcome.outcome, outcome.proof) == ("met", "complete list")
    assert outcome.measured[0] == pytest.approx(value, rel=1e-3, abs=1e-4)


def test_damping_is_that_of_the_least_damped_mode_real_ones_included():
    """-1 for the growing mode between the two stable states; 1 where nothing turns; R / 2 sqrt(C / L) of a series tank."""
    every, stable = asked(PUMP, "expect damping = -1", "expect damping in stable states = 1")
    assert (every.outcome, stable.outcome) == ("violated", "met")
    assert min(every.measured) == pytest.approx(-1.0)
    tank = 'circuit tank "Tank"\ngnd -> feed: 1 V -> top -- r: 200 ohm -- a -- l: 1 mH -- b -- c: 1 nF -- gnd\n'
    assert one(tank, "expect damping = 0.1 +/- 0.0001").measured == pytest.approx((0.1,), rel=1e-9)


def test_slope_in_every_state_or_in_the_stable_ones():
    line = "expect slope of out along level"
    every, stable = asked(PUMP, f"{line} > -1", f"{line} in stable states > -1")
    assert (every.outcome, stable.outcome) == ("violated", "met")
    assert len(every.measured) == 3
    assert len(stable.measured) == 2
    # the middle point: out moves against the input by r_fb / r_in
    assert every.measured[0] == pytest.approx(-4.7, rel=1e-3)
    assert every.note.startswith("state B (unstable")


def test_growth_rate_and_damping_of_a_bridge_oscillator():
    tone = library("tide_tone")
    wanted = tuple(r for r in tone.requirements if r.measure in ("growth rate", "damping"))
    assert [o.outcome for o in replace(tone, requirements=wanted).verify()] == ["met", "met"]


def test_thresholds_rest_on_stations_unless_proof_is_asked_for():
    line = f"{RISING} = 5.45 V +/- 0.1 V"
    usual, strict = one(PUMP, line), one(PUMP, line, require_proof=True)
    assert (usual.outcome, usual.proof) == ("met", "complete at 11 stations")
    assert (strict.outcome, strict.proof) == ("met", "proved")
    assert usual.measured == strict.measured


def test_a_threshold_outside_its_limits_is_violated_and_says_from_where_to_where():
    outcome = one(PUMP, f"{RISING} < 5 V")
    assert outcome.outcome == "violated"
    assert outcome.note.startswith("out jumps from 0.02")
    assert "at level = 5.4" in outcome.note


def test_hysteresis_is_the_distance_of_both():
    outcome = one(PUMP, "expect hysteresis of out along level = 1.9 V +/- 50 mV")
    assert (outcome.outcome, outcome.proof) == ("met", "complete at 11 stations")
    assert outcome.measured[0] == pytest.approx(8.96 * 10.0 / 47.0, abs=5e-3)  # closed form, rails less 20 mV each


def test_a_net_that_never_jumps_violates_its_threshold():
    outcome = one(INVERTER, "expect rising threshold of out along level in -1 V .. 1 V")
    assert (outcome.outcome, outcome.note) == ("violated", "out never jumps for a rising level within -1 .. 1")


def test_a_branch_that_ends_with_hardly_a_move_of_the_net_is_no_answer():
    outcome = one(PUMP, "expect rising threshold of vcc along level > 1 V")
    assert outcome.outcome == "undecided"
    assert "a branch ends at 5.4" in outcome.note


def test_a_trace_that_is_not_complete_decides_nothing():
    circuit = loopsim.parse(PUMP + f"{RISING} = 5.45 V +/- 0.1 V\n")
    (requirement,) = circuit.requirements
    limits = limits_of(requirement.relation, {})
    whole = trace(circuit, "level", range_budget=0.0)
    assert judge_trace(whole, requirement, limits).outcome == "met"
    for doubtful in (
        replace(whole, complete_at=whole.complete_at[1:]),
        replace(whole, notes=("the turn of branch 1 near 5 could not be located",)),
    ):
        judged = judge_trace(doubtful, requirement, limits)
        assert (judged.outcome, len(judged.measured)) == ("undecided", 1)
    assert judge_trace(replace(whole, over_range=True), requirement, limits).proof == "proved"


def test_a_slow_ride_needs_stable_states_to_begin_in():
    circuit = loopsim.parse(PUMP + f"{RISING} = 5.45 V +/- 0.1 V\nexpect falling threshold of out along level = 3.55 V +/- 0.1 V\n")
    rising, falling = circuit.requirements
    limits = limits_of(rising.relation, {})
    whole = trace(circuit, "level", range_budget=0.0)
    (branch,) = whole.branches
    low_end, high_end = (0, -1) if branch.values[0] == 0.0 else (-1, 0)
    for doubt in (None, False):
        flags = list(branch.stable)
        flags[low_end] = doubt
        doubtful = replace(whole, branches=(replace(branch, stable=tuple(flags)),))
        judged = judge_trace(doubtful, rising, limits)
        assert (judged.outcome, "at level = 0" in judged.note) == ("undecided", True)
        assert judge_trace(doubtful, falling, limits_of(falling.relation, {})).outcome == "met"
    assert branch.values[high_end] == 9.0


def test_a_value_within_its_own_error_of_a_limit_is_open():
    circuit = loopsim.parse(PUMP + f"{RISING} < 5.45 V\n")
    (requirement,) = circuit.requirements
    whole = trace(circuit, "level", range_budget=0.0)
    at = whole.thresholds("out").rising
    assert judge_trace(whole, requirement, ((None, at),)).outcome == "undecided"
    assert judge_trace(whole, requirement, ((None, at + 1e-6),)).outcome == "met"


def test_what_goes_wrong_in_one_requirement_leaves_the_others_alone():
    lines = "expect states = 1 at ambient = 5000 degC\nexpect states = 1\nexpect rising threshold of mid along supply > 1 V\n"
    circuit = loopsim.parse(DIVIDER + lines)
    # the language refuses a let without a range; a program may ask all the same
    third = replace(circuit.requirements[2], along="ambient")
    hot, fine, ranged = replace(circuit, requirements=(*circuit.requirements[:2], third)).verify()
    assert (hot.outcome, fine.outcome, ranged.outcome) == ("undecided", "met", "undecided")
    assert hot.note.startswith("field-range: ")
    assert ranged.note.startswith("let-range: ")


def test_a_circuit_that_is_wrong_in_itself_is_an_error():
    with pytest.raises(loopsim.CircuitError, match="loop"):
        asked('circuit shorted "Two sources"\ngnd -> a: 1 V -> x\ngnd -> b: 2 V -> x\n', "expect states = 1")


def test_a_spent_budget_leaves_every_requirement_undecided():
    outcomes = library("cistern_pump").verify(budget=1e-9)
    assert {o.outcome for o in outcomes} == {"undecided"}
    assert all("used up" in o.note for o in outcomes)


def test_an_analysis_is_done_once_for_equal_settings(monkeypatch):
    from loopsim.requirements import computed

    asked_for = []
    monkeypatch.setattr(computed, "states", lambda *args, **options: asked_for.append(args[1]) or loopsim.Circuit.states(args[0]))
    asked(PUMP, "expect states = 3", "expect stable states = 2 at level = 4.5 V", "expect values of mid > 1 V at supply = 9 V")
    assert asked_for == [{}]


def test_the_weakest_label_holds_for_several():
    assert weakest(["proved", "by corners", "simulated"]) == "by corners"
    assert weakest(["complete at 11 stations", "proved"]) == "complete at 11 stations"
    assert ENOUGH == ("proved", "complete list")


def test_every_measure_is_served_but_those_of_the_loop():
    from loopsim.language.measures import MEASURES

    assert set(MEASURES) - set(SERVERS) == {"loop gain", "phase margin"}
