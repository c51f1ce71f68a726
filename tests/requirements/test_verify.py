"""Requirements end met, violated or undecided; what is not proved is never met."""

import xml.etree.ElementTree as ET
from dataclasses import replace

import loopsim
from loopsim.analyses.states import states
from loopsim.output.junit import junit_text
from loopsim.requirements.counts import count
from loopsim.requirements.limits import limits_of
from loopsim.requirements.verify import verify

FILE = "circuits/comparators/cistern_pump.loop"


def pump():
    return loopsim.load(FILE)


def test_counts_hold_at_every_binding_and_open_measures_stay_undecided():
    circuit = pump()
    found = {o.text: o.outcome for o in verify(replace(circuit, requirements=circuit.requirements[:3]))}
    assert found["expect states = 3 at level = 4.5 V"] == "met"
    assert found["expect states = 1 at level = 1 V, 8 V"] == "met"
    opened = replace(circuit.requirements[0], measure="loop gain")
    (outcome,) = verify(replace(circuit, requirements=(opened,)))
    assert (outcome.outcome, outcome.note) == ("undecided", "loop gain: not measured yet")


def test_a_wrong_count_is_violated_and_names_the_states():
    circuit = pump()
    at = circuit.requirements[0].at
    wrong = replace(circuit.requirements[2], at=at)  # one state, asked where there are three
    (outcome,) = verify(replace(circuit, requirements=(wrong,)))
    assert (outcome.outcome, outcome.measured, outcome.margin) == ("violated", (3.0,), -2.0)
    assert "unstable" in outcome.note


def test_an_incomplete_list_is_never_met_but_too_many_certified_states_violate():
    circuit = pump()
    found = replace(states(circuit, {"level": 4.5}), complete=False, undecided=1)
    three, _, one = circuit.requirements[:3]
    assert count(found, three, limits_of(three.relation, {})).outcome == "undecided"
    assert count(found, one, limits_of(one.relation, {})).outcome == "violated"
    unproved = replace(found, states=tuple(replace(s, certified_radius=0.0) for s in found))
    assert count(unproved, one, limits_of(one.relation, {})).outcome == "undecided"


def test_names_stay_inert_in_the_report():
    circuit = pump()
    (first,) = verify(replace(circuit, requirements=circuit.requirements[:1]))
    nasty = replace(first, label='<b>&"\x1b[31m\n|', outcome="violated", note="]]>\x00")
    case = ET.fromstring(junit_text([nasty])).find("testsuite/testcase")
    assert case.get("name") == '<b>&"\\x1b[31m\\n|'
    assert case.find("failure").get("type") == "violated"
