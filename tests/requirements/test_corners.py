"""Requirements over tolerances, by corners: met only with that label, violated with the corner that does it."""

import pytest
from asking import DIVIDER, PUMP, library, one

import loopsim
from loopsim.errors import AnalysisError
from loopsim.requirements.computed import Computed
from loopsim.requirements.corners import every_corner, loose, over_tolerances
from loopsim.requirements.judged import Judged
from loopsim.requirements.jump_corners import Followed
from loopsim.requirements.jumps import jumps
from loopsim.requirements.proved_tolerances import count_is_proved

RISING = "expect rising threshold of out along level"


def test_extremes_of_a_divider_are_those_of_its_closed_form():
    outcome = one(DIVIDER, "expect values of mid = 5 V +/- 0.6 V over tolerances")
    low, high = 9.0 * 0.99 / (0.99 + 1.01), 11.0 * 1.01 / (0.99 + 1.01)  # closed form
    assert outcome.outcome == "met"
    assert outcome.measured == pytest.approx((low, high), rel=1e-12)
    assert outcome.margin == pytest.approx(5.6 - high, rel=1e-9)
    # the capacitor moves no state at rest, so three quantities are left
    assert outcome.note.startswith("all 8 corners of 3 quantities")


def test_met_at_every_corner_is_labelled_so_and_is_no_proof():
    line = "expect values of mid = 5 V +/- 0.6 V over tolerances"
    assert one(DIVIDER, line).proof == "by corners"
    strict = one(DIVIDER, line, require_proof=True)
    assert strict.outcome == "undecided"
    assert strict.note.startswith("met, but only by corners: not proved; all 8 corners of 3 quantities")


def test_a_violated_corner_is_named_whatever_is_required():
    line = "expect values of mid = 5 V +/- 0.5 V over tolerances"
    for options in ({}, {"require_proof": True}):
        outcome = one(DIVIDER, line, **options)
        assert outcome.outcome == "violated"
        # r_top low, r_bottom high, supply high: the only way up
        assert "supply = 11 V, r_top.resistance = 990 ohm, r_bottom.resistance = 1010 ohm" in outcome.note
        assert outcome.margin == pytest.approx(5.5 - 11.0 * 1.01 / 2.0)


def test_what_fails_at_nominal_values_says_so():
    outcome = one(DIVIDER, "expect values of mid = 6 V +/- 0.2 V over tolerances")
    assert (outcome.outcome, outcome.note.split(":")[0]) == ("violated", "at nominal values")


def test_a_quantity_that_is_bound_has_no_tolerance_left():
    outcome = one(DIVIDER, "expect values of mid = 5 V +/- 0.06 V at supply = 10 V over tolerances")
    assert outcome.outcome == "met"
    assert outcome.note.startswith("all 4 corners of 2 quantities")


def test_beyond_the_cap_corners_follow_the_signs_of_single_moves():
    chain = " -- ".join(f"n{k} -- r{k}: 1 kohm +/- 1 %" for k in range(1, 10))
    text = f'circuit ladder "Ten resistors in a row"\ngnd -> source: 10 V -> {chain} -- gnd\n'
    outcome = one(text, "expect values of n6 = 5 V +/- 0.9 V over tolerances")
    # four resistors of nine below n6, six above it counted from the source: all above low, all below high is the highest (closed form)
    low, high = 10.0 * 4 * 0.99 / (4 * 0.99 + 5 * 1.01), 10.0 * 4 * 1.01 / (4 * 1.01 + 5 * 0.99)
    assert outcome.measured == pytest.approx((low, high), rel=1e-12)
    assert "9 quantities with a tolerance, each alone at both limits, and the 2 corners" in outcome.note
    assert one(text, "expect values of n6 = 4.4444 V +/- 40 mV over tolerances").outcome == "violated"


def test_trip_points_at_corners_match_the_closed_form_of_an_ideal_comparator():
    outcome = one(PUMP, f"{RISING} = 5.45 V +/- 0.2 V over tolerances")
    assert (outcome.outcome, outcome.proof) == ("met", "by corners")

    def ideal(supply, top, bottom):  # node equation at the input, output 20 mV above ground (closed form)
        reference = supply * bottom / (top + bottom)
        return reference + (reference - 0.02) * 10.0 / 47.0

    ends = ideal(8.91, 1.01, 0.99), ideal(9.09, 0.99, 1.01)
    # the fold comes a few mV before the ideal corner: the rail clamp has a knee
    assert outcome.measured == pytest.approx(ends, abs=5e-3)


def test_a_trip_point_outside_at_one_corner_is_violated_there():
    outcome = one(PUMP, f"{RISING} < 5.55 V over tolerances")
    assert outcome.outcome == "violated"
    assert outcome.note.startswith("at supply = 9.09 V, r_top.resistance = 21780 ohm, r_bottom.resistance = 22220 ohm: out jumps at")


@pytest.mark.slow
def test_folds_moved_together_are_where_a_full_trace_of_each_corner_finds_them():
    circuit = library("cistern_pump")
    for requirement in (r for r in circuit.requirements if r.over_tolerances):
        followed = Followed(Computed(circuit, 1e3, 600.0), requirement, {})
        corners = every_corner(loose(circuit, requirement, {})).corners
        followed.prepare(corners)
        assert len(followed.moved) == len(corners) == 32
        for corner in corners:
            (moved,) = followed(corner).measured
            (traced,) = jumps(followed.computed, requirement, corner).measured
            assert moved == pytest.approx(traced, abs=1e-9 * 9.0)


def test_counts_at_corners():
    assert one(PUMP, "expect states = 3 at level = 5.3 V over tolerances").outcome == "met"
    outcome = one(PUMP, "expect states = 3 at level = 5.45 V over tolerances")
    assert outcome.outcome == "violated"
    assert "A stable" in outcome.note


# a cubic with a falling part: three states from 0.53 V to 1.04 V of the source, one elsewhere
FALLING = """
circuit falling "Load line across a falling curve"
curve dip = polynomial(45 mA/V, -305 mA/V^2, 540 mA/V^3)
gnd -> source: supply -> feed -- r: 470 ohm -- top -> d: dip -> gnd
"""


def test_corners_miss_what_happens_between_them_and_are_never_called_proof():
    text = FALLING + "let supply = 1.5 V + 0 % - 95 %\n"
    inside = one(text, "expect states = 3 at supply = 0.7 V")
    line = "expect states = 1 over tolerances"
    usual, strict = one(text, line), one(text, line, require_proof=True)
    assert inside.outcome == "met"
    assert (usual.outcome, usual.proof) == ("met", "by corners")  # which is why this label says so little
    assert strict.outcome == "undecided"


def test_a_count_over_the_tolerance_of_one_source_is_proved_where_that_is_asked_for():
    text = FALLING + "let supply = 0.7 V +/- 5 %\n"
    line = "expect states = 3 over tolerances"
    assert one(text, line).proof == "by corners"
    strict = one(text, line, require_proof=True)
    assert (strict.outcome, strict.proof, strict.measured) == ("met", "proved", (3.0,))
    # with a second value that varies there is no such proof
    both = one(text.replace("470 ohm", "470 ohm +/- 1 %"), line, require_proof=True)
    assert (both.outcome, both.proof) == ("undecided", "by corners")


def test_a_count_is_not_proved_where_a_branch_enters_the_box_on_the_way():
    """With a gain of a thousand the net is within 50 V for a thousandth of the tolerance alone, where no corner and no station is."""
    text = (
        'circuit steep "A gain of a thousand"\nlet level = 2 V +/- 1 V\ngnd -> probe: level -> sense\nsense -- r: 1 kohm -- gnd\n'
        "gnd -> amp: 1000 * sense - 2350 V -> a\na -- r_a: 1 kohm -- gnd\n"
    )
    circuit = loopsim.parse(text + "expect states = 0 over tolerances\n")
    assert not count_is_proved(Computed(circuit, 50.0, 60.0), circuit.requirements[0], {}, 0.0)


def test_a_spent_budget_leaves_it_undecided():
    outcome = one(PUMP, "expect states = 3 at level = 5.3 V over tolerances", budget=1e-9)
    assert outcome.outcome == "undecided"
    assert "used up" in outcome.note


@pytest.mark.parametrize(("third", "word"), [("met", "undecided"), ("violated", "violated")])
def test_a_round_cut_short_is_never_met_but_what_it_violated_stands(third, word):
    circuit = loopsim.parse(DIVIDER + "expect values of mid = 5 V over tolerances\n")
    answers = iter([Judged("met", (5.0,)), Judged("met", (5.1,)), Judged(third, (5.2,), margin=-0.1)])

    def at_corner(corner):
        for answer in answers:
            return answer
        raise AnalysisError("budget", "no time left")

    judged = over_tolerances(Computed(circuit, 1e3, 60.0), circuit.requirements[0], {}, at_corner)
    assert judged.outcome == word


def test_with_no_tolerance_at_all_the_nominal_circuit_is_the_answer():
    text = 'circuit fixed "No tolerance"\ngnd -> source: 2 V -> top -- r: 1 kohm -- gnd\n'
    outcome = one(text, "expect values of top = 2 V +/- 1 mV over tolerances")
    assert (outcome.outcome, outcome.proof, outcome.note) == ("met", "proved", "nothing that moves it has a tolerance")
