"""The rules of judging, on made-up results by the thousand: met is never said of what is open, violated never of what may still hold."""

from types import SimpleNamespace

import numpy as np
import pytest

from loopsim.circuit import Relation, Requirement
from loopsim.expressions import NetRef
from loopsim.requirements.counts import COUNTS, count
from loopsim.requirements.judged import number
from loopsim.requirements.oscillation import judge_cycle
from loopsim.requirements.settling import judge_run
from loopsim.requirements.values import Reading, judge_readings


class Listed(list):
    """A made-up list of states."""

    watch = ()
    remainder = ()

    def __init__(self, states, complete):
        super().__init__(states)
        self.complete = complete
        self.word = "complete" if complete else "undecided"


def state(random, name):
    stable = random.choice([True, False, None])
    radius = float(random.choice([0.0, 1e-3]))
    return SimpleNamespace(name=name, stable=stable, verdict=str(stable), certified_radius=radius)


def asked(measure, form, *, in_stable_states=False):
    return Requirement("x", measure, Relation(form, ()), "expect x", NetRef("out"), "out", in_stable_states=in_stable_states)


def inside(value, pair, form):
    """Independent of the judge: within limits, strictly where the relation is."""
    low, high = pair
    if form in ("below", "above"):
        return (low is None or value > low) and (high is None or value < high)
    return low <= value <= high


def limits_for(random, form):
    if form == "below":
        return ((None, float(random.integers(0, 5))),)
    if form == "above":
        return ((float(random.integers(0, 5)), None),)
    pairs = 2 if form == "set" else 1
    lows = random.integers(0, 5, pairs)
    return tuple((float(low), float(low + random.integers(0, 3))) for low in lows)


@pytest.mark.parametrize("form", ["equal", "range", "below", "above"])
@pytest.mark.parametrize("measure", list(COUNTS))
def test_counts(measure, form):
    random = np.random.default_rng(7)
    seen = set()
    for _ in range(300):
        found = Listed([state(random, str(k)) for k in range(random.integers(0, 5))], bool(random.integers(0, 2)))
        limits = limits_for(random, form)
        judged = count(found, asked(measure, form), limits)
        wanted = COUNTS[measure]
        least = sum(s.stable in wanted and s.certified_radius > 0.0 for s in found)
        counted = sum(s.stable in wanted for s in found)
        open_ = not found.complete or (measure != "states" and any(s.stable is None for s in found))
        seen.add(judged.outcome)
        if judged.outcome == "met":
            assert not open_
            assert inside(counted, limits[0], form)
        elif judged.outcome == "violated":
            # no number of further states can mend it
            number_of = [counted] if not open_ else range(least, least + 20)
            assert not any(inside(n, limits[0], form) for n in number_of)
            assert judged.note
        else:
            assert open_
            assert judged.note
            assert judged.proof == ""
    assert seen == {"met", "violated", "undecided"}


@pytest.mark.parametrize("form", ["equal", "range", "below", "above", "set"])
@pytest.mark.parametrize("in_stable_states", [False, True])
def test_numbers_at_states(form, in_stable_states):
    random = np.random.default_rng(11)
    seen = set()
    for _ in range(600):
        states = [state(random, str(k)) for k in range(random.integers(0, 4))]
        found = Listed(states, bool(random.integers(0, 4)))
        chosen = [s for s in states if not in_stable_states or s.stable is True]
        missing = [s.name for s in chosen if random.random() < 0.1]
        readings = [Reading(s, float(random.integers(0, 6)), s.certified_radius) for s in chosen if s.name not in missing]
        limits = limits_for(random, form)
        judged = judge_readings(found, asked("values", form, in_stable_states=in_stable_states), limits, readings, missing, "proved")
        open_ = not found.complete or bool(missing) or (in_stable_states and any(s.stable is None for s in states))
        outside = [r for r in readings if not any(inside(r.value, pair, form) for pair in limits)]
        unhit = [pair for pair in limits if not any(inside(r.value, pair, form) for r in readings)]
        seen.add(judged.outcome)
        if judged.outcome == "met":
            assert not open_
            assert readings
            assert not outside
            assert not unhit
        elif judged.outcome == "violated":
            certain = any(r.state.certified_radius > 0.0 for r in outside)
            assert certain or (not open_ and (unhit or not readings))
            assert judged.note
            assert judged.proof
        else:
            # nothing is open, nobody stands at a limit: then it has to be decided
            at_limit = any(min(abs(r.value - end) for pair in limits for end in pair if end is not None) < 1e-3 for r in readings)
            assert open_ or at_limit or any(r.state.certified_radius == 0.0 for r in outside)
            assert judged.note
    assert seen == {"met", "violated", "undecided"}


def test_a_number_nearer_to_its_limit_than_its_error_is_open_on_both_sides():
    for value, outcome in ((0.5, "met"), (0.95, "undecided"), (1.05, "undecided"), (1.5, "violated")):
        assert number(value, 0.1, ((None, 1.0),), "below", "proved", "there").outcome == outcome
    assert number(1.0, 0.0, ((None, 1.0),), "below", "proved", "there").outcome == "violated"
    assert number(1.0, 0.0, ((1.0, 1.0),), "equal", "proved", "there").outcome == "met"


class Run(SimpleNamespace):
    """A made-up run from 0 to 2 V."""

    def __getitem__(self, net):
        return np.array([0.0, 2.0])


def motion(**more):
    """A made-up run that has come to rest at 2 V."""
    given = {
        "end": "settles", "end_state": None, "start": "off", "times": [0.0, 1.0], "notes": (), "tolerance": 1e-5, "final": lambda net: 2.0,
        "settling_time": lambda net, band: 0.25,
    }  # fmt: skip
    return Run(**{**given, **more})


@pytest.mark.parametrize(
    ("measure", "more", "limits", "outcome"),
    [
        ("final value", {}, (1.0, 3.0), "met"),
        ("final value", {}, (1.0, 1.9), "violated"),
        ("final value", {}, (1.0, 2.0001), "undecided"),
        ("settling time", {}, (0.0, 0.3), "met"),
        ("settling time", {}, (0.0, 0.2), "violated"),
        ("start state", {"end": "ends in state C", "end_state": "C"}, (1.0, 3.0), "met"),
        ("final value", {"end": "still moving"}, (1.0, 3.0), "undecided"),
        ("final value", {"end": "stopped early"}, (1.0, 3.0), "undecided"),
        ("final value", {"end": "oscillates with a period of 1 s"}, (1.0, 3.0), "violated"),
    ],
)
def test_ends_of_runs(measure, more, limits, outcome):
    judged = judge_run(motion(**more), asked(measure, "range"), (limits,))
    assert (judged.outcome, bool(judged.note)) == (outcome, outcome != "met")


def wave(**more):
    """A made-up sine of 2 V and 1 ms."""
    given = {
        "stable": True, "exact": True, "period": 1e-3, "nets": ("out",), "start": "off", "verdict": "stable cycle",
        "swing": lambda net: 2.0, "duty": lambda net: 0.5, "at": lambda times: {"out": np.sin(2000.0 * np.pi * times)},
    }  # fmt: skip
    return SimpleNamespace(**{**given, **more})


@pytest.mark.parametrize(
    ("measure", "more", "limits", "outcome"),
    [
        ("period", {}, (0.9e-3, 1.1e-3), "met"),
        ("frequency", {}, (900.0, 1100.0), "met"),
        ("duty", {}, (0.6, 0.7), "violated"),
        ("swing", {}, (1.9, 2.1), "met"),
        ("period", {}, (0.9e-3, 1.000001e-3), "undecided"),
        ("period", {"exact": False}, (0.9e-3, 1.001e-3), "undecided"),
        ("period", {"exact": False}, (0.9e-3, 1.1e-3), "met"),
        ("period", {"stable": None}, (0.9e-3, 1.1e-3), "met"),
        ("period", {"stable": False}, (0.9e-3, 1.1e-3), "undecided"),
    ],
)
def test_cycles(measure, more, limits, outcome):
    judged = judge_cycle(wave(**more), asked(measure, "range"), (limits,))
    assert (judged.outcome, bool(judged.note)) == (outcome, outcome != "met")
