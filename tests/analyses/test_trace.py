"""The whole characteristic along a let: folds, thresholds, crossings, and what is proved about them."""

import dataclasses
import itertools

import mpmath
import numpy as np
import pytest

import loopsim
from loopsim.analyses.family import Family
from loopsim.analyses.trace import Trace
from loopsim.errors import AnalysisError, CircuitError

CURVE = """circuit two "two falling curves"
let supply = 30 V in 0 V .. 60 V
curve first_curve = polynomial(11.8 mA/V, -10.5 mA/V^2, 2.5 mA/V^3)
curve second_curve = polynomial(4.56 mA/V, -2.69 mA/V^2, 0.43 mA/V^3)
gnd -> source: supply -> feed -- r_load: 13.3 kohm -- upper -> d1: first_curve -> lower -> d2: second_curve -> gnd
upper -- c1: 10 pF -- lower -- c2: 10 pF -- gnd
"""


@pytest.fixture(scope="module")
def two() -> Trace:
    return loopsim.parse(CURVE).trace("supply", watch=["upper", "lower"])


# Folds of two tunnel diodes in series, recomputed to 40 digits; circuit after L. O. Chua, A. Ushida, Int. J. Circuit Theory Appl. 4
# (1976) 215-239 (coefficients from memory).
FOLDS = (
    17.4326592791347814, 23.7405131423377845, 25.4617117400949651, 26.8592854886430095,
    32.5962175345852683, 33.9072457453627066, 34.7319065951493801, 58.3007488102998987,
)  # fmt: skip
COUNTS = (1, 3, 5, 7, 9, 7, 5, 3, 1)


def test_all_folds_of_two_falling_curves_are_located(two: Trace) -> None:
    assert [f.at for f in two.folds] == pytest.approx(FOLDS, rel=1e-10)
    assert all(f.precision < 1e-10 for f in two.folds)


def test_the_closed_branch_that_no_sweep_reaches_is_found(two: Trace) -> None:
    assert sorted(branch.closed for branch in two.branches) == [False, True]
    loop = next(branch for branch in two.branches if branch.closed)
    assert loop.values.min() == pytest.approx(FOLDS[1], abs=0.05) and loop.values.max() == pytest.approx(FOLDS[6], abs=0.05)


def test_counts_between_the_folds_are_those_of_the_page(two: Trace) -> None:
    edges = [0.0, *FOLDS, 60.0]
    for (low, high), count in zip(itertools.pairwise(edges), COUNTS, strict=True):
        points = loopsim.parse(CURVE).states(supply=0.5 * (low + high))
        assert points.complete and len(points) == count
    assert [count for _, count in two.counts] == [COUNTS[np.searchsorted(FOLDS, value)] for value, _ in two.counts]


def test_every_value_of_the_supply_is_proved_without_a_gap(two: Trace) -> None:
    assert two.complete and two.over_range and two.gaps == ()


def test_a_slow_supply_meets_only_the_folds_of_the_branch_it_is_on(two: Trace) -> None:
    # the main curve alone: its stable stretches end at 17.43, 26.86, 32.60 and 58.30 V (same source)
    known = two.thresholds("upper")
    assert known.all_rising == pytest.approx((FOLDS[4], FOLDS[7]), rel=1e-9)
    assert known.all_falling == pytest.approx((FOLDS[3], FOLDS[0]), rel=1e-9)


COMPARATOR = """circuit switch "{what}"
let level = 2.5 V in 0 V .. 5 V
kind amp = opamp(gain = 100 dB, gain_bandwidth = 1 MHz, headroom_high = 1 mV, headroom_low = 1 mV, knee = 0.2 mV)
gnd -> battery: 5 V -> vcc
gnd -> half: 2.5 V -> mid
gnd -> probe: level -> sense
{wiring}
"""
FOLLOWING = """sense -- r_in: 12 kohm -- plus -- r_fb: 33 kohm -- out
u1: amp(plus = plus, minus = mid, out = out, high = vcc, low = gnd)"""
INVERTING = """mid -- r_in: 12 kohm -- plus -- r_fb: 33 kohm -- out
u1: amp(plus = plus, minus = sense, out = out, high = vcc, low = gnd)"""


def comparator(wiring: str) -> Trace:
    return loopsim.parse(COMPARATOR.format(what="a switch", wiring=wiring)).trace("level", watch="out")


def test_thresholds_and_middle_slope_of_a_following_comparator() -> None:
    # common practice: the swing from the middle, 2.5 V less headroom, times R_in / R_fb; slope in between -R_fb / R_in
    curve = comparator(FOLLOWING)
    reach = 2.499 * 12 / 33
    known = curve.thresholds("out")
    assert known.rising == pytest.approx(2.5 + reach, abs=3e-3) and known.falling == pytest.approx(2.5 - reach, abs=3e-3)
    assert known.hysteresis == pytest.approx(2 * reach, abs=6e-3)
    branch = curve.branches[0]
    inner = [k for k, stable in enumerate(branch.stable) if stable is False and 0.5 < branch.nets["out"][k] < 4.5]
    slope = np.polyfit(branch.values[inner], branch.nets["out"][inner], 1)[0]
    assert slope == pytest.approx(-33 / 12, rel=1e-3)
    assert curve.over_range and not curve.gaps


def test_thresholds_of_an_inverting_comparator() -> None:
    # common practice: the middle plus or minus the swing times R_in / (R_in + R_fb)
    curve = comparator(INVERTING)
    reach = 2.499 * 12 / 45
    known = curve.thresholds("out")
    assert (known.rising, known.falling) == pytest.approx((2.5 + reach, 2.5 - reach), abs=3e-3)
    landed = {f.direction: f.lands["out"] for f in curve.folds if f.lands is not None}
    assert landed["rising"] < 0.1 and landed["falling"] > 4.9


CUSP = """circuit cusp "a normal form"
let a = 0 A in -2 A .. 2 A
let b = 1 S
curve cubic = polynomial(0 A/V, 0 A/V^2, 1 A/V^3)
gnd -> push: a -> x
gnd -> back: b * x -> x
x -> bend: cubic -> gnd
x -- c: 1 F -- gnd
"""


@pytest.mark.parametrize("b", [0.1, 0.5, 1.0])
def test_the_folds_of_a_cusp_follow_its_power_law(b: float) -> None:
    # 0 = a + b x - x^3 has folds at a = +-2 (b/3)^1.5, x = -+sqrt(b/3): textbook normal form
    curve = loopsim.parse(CUSP).trace("a", watch="x", b=b)
    assert [f.at for f in curve.folds] == pytest.approx([-2 * (b / 3) ** 1.5, 2 * (b / 3) ** 1.5], rel=1e-9)
    assert [f.nets["x"] for f in curve.folds] == pytest.approx([np.sqrt(b / 3), -np.sqrt(b / 3)], rel=1e-6)
    # beyond a fold only the far root is left: 2 sqrt(b/3) on the other side
    assert [f.lands["x"] for f in curve.folds if f.lands] == pytest.approx([-2 * np.sqrt(b / 3), 2 * np.sqrt(b / 3)], rel=1e-4)
    assert curve.over_range


def test_before_the_cusp_there_is_no_fold() -> None:
    curve = loopsim.parse(CUSP).trace("a", watch="x", b=-0.1)
    assert not curve.folds and curve.thresholds("x").rising is None and curve.over_range


@pytest.mark.parametrize("b", [1e-4, 1e-3, 1e-2])
def test_a_fold_pair_far_narrower_than_the_range_is_not_stepped_over(b: float) -> None:
    """The hysteresis 4 (b/3)^1.5 is down to 2e-7 of the range here, on a stretch so steep that the tangent does not turn."""
    curve = loopsim.parse(CUSP).trace("a", watch="x", stations=8, b=b)
    assert [f.at for f in curve.folds] == pytest.approx([-2 * (b / 3) ** 1.5, 2 * (b / 3) ** 1.5], rel=1e-6)
    assert curve.crossings == () and [f.direction for f in curve.folds] == ["falling", "rising"]


@pytest.mark.parametrize("reach", [1e2, 1e3, 1e4])
def test_no_two_turns_are_located_at_one_fold(reach: float) -> None:
    curve = loopsim.parse(CUSP).trace("a", watch="x", stations=8, over=(-reach, reach))
    places = [f.nets["x"] for f in curve.folds]
    assert all(abs(a - b) > 0.1 for a, b in itertools.combinations(places, 2))
    assert len(curve.folds) == 2 or (curve.notes and not curve.over_range)


PITCHFORK = """circuit fork "a symmetric pair"
let b = 0 S in -1 S .. 1 S
curve cubic = polynomial(0 A/V, 0 A/V^2, 1 A/V^3)
gnd -> back: b * x -> x
x -> bend: cubic -> gnd
x -- c: 1 F -- gnd
"""


def test_where_branches_cross_both_are_followed_and_the_point_is_named() -> None:
    # b x - x^3: x = 0 and x = +-sqrt(b) meet at b = 0 (textbook normal form)
    curve = loopsim.parse(PITCHFORK).trace("b", watch="x", stations=8)
    assert [c.kind for c in curve.crossings] == ["branch point"]
    assert curve.crossings[0].at == pytest.approx(0.0, abs=1e-6) and curve.crossings[0].precision < 1e-6
    assert not curve.folds and not curve.notes
    ends = sorted(float(branch.nets["x"][k]) for branch in curve.branches for k in (0, -1) if branch.values[k] == 1.0)
    assert ends == pytest.approx([-1.0, 0.0, 1.0], abs=1e-9)
    assert not curve.over_range  # the point itself stays open


WIEN = """circuit bridge "a sustained tone"
let gain = 2 in 1 .. 5
gnd -> amp: gain * plus -> out
out -- r_1: 10 kohm -- a -- c_1: 10 nF -- plus
plus -- r_2: 10 kohm -- gnd
plus -- c_2: 10 nF -- gnd
"""


def test_a_wien_bridge_begins_to_swing_at_a_gain_of_three() -> None:
    # s^2 + (3 - K) w0 s + w0^2: w0 = 1 / (R C), textbook
    curve = loopsim.parse(WIEN).trace("gain", watch="out")
    (point,) = curve.hopf
    assert point.at == pytest.approx(3.0, rel=1e-9)
    assert point.frequency == pytest.approx(1.0 / (2.0 * np.pi * 1e-4), rel=1e-6)
    assert curve.branches[0].stable[0] is True and curve.branches[0].stable[-1] is False


def test_along_a_capacitance_the_state_stands_still_and_the_verdict_may_turn() -> None:
    # the same bridge with unequal capacitors: it swings where K > 1 + R1/R2 + C2/C1, textbook; K = 2.5 and equal resistors: C2/C1 < 0.5
    text = WIEN.replace("let gain = 2 in 1 .. 5", "let gain = 2.5\nlet c_low = 10 nF in 1 nF .. 20 nF").replace("c_2: 10 nF", "c_2: c_low")
    curve = loopsim.parse(text).trace("c_low", watch="out")
    (point,) = curve.hopf
    assert point.at == pytest.approx(5e-9, rel=1e-8)
    assert np.ptp(curve.branches[0].nets["out"]) == pytest.approx(0.0, abs=1e-12)


SCHMITT = """circuit dusk "an emitter-coupled pair"
let glow = 1.8 V in 0 V .. 4 V
kind npn = bipolar_npn(saturation_current = 10 fA, forward_gain = 200, reverse_gain = 2)
gnd -> battery: 12 V -> vcc
gnd -> sensor: glow -> b1
vcc -- r_c1: 4.7 kohm -- c1 -- r_1: 33 kohm -- b2 -- r_2: 10 kohm -- gnd
vcc -- r_c2: 1 kohm -- drive
tail -- r_e: 470 ohm -- gnd
q1: npn(collector = c1, base = b1, emitter = tail)
q2: npn(collector = drive, base = b2, emitter = tail)
"""


def _emitter_coupled(glow, c1, b2, drive, tail, vt):
    """Balances at c1, b2, drive, tail by the transport equations of two npn transistors (textbook), in extended precision."""
    gain, reverse, current = mpmath.mpf(200), mpmath.mpf(2), mpmath.mpf("1e-14")

    def npn(c, b, e):
        forward, backward = current * (mpmath.exp((b - e) / vt) - 1), current * (mpmath.exp((b - c) / vt) - 1)
        return forward - backward - backward / reverse, forward / gain + backward / reverse

    c_1, b_1 = npn(c1, glow, tail)
    c_2, b_2 = npn(drive, b2, tail)
    return [
        (c1 - 12) / 4700 + (c1 - b2) / 33000 + c_1,
        (b2 - c1) / 33000 + b2 / 10000 + b_2,
        (drive - 12) / 1000 + c_2,
        tail / 470 - c_1 - b_1 - c_2 - b_2,
    ]


def test_the_folds_of_a_bipolar_trigger_agree_with_extended_precision() -> None:
    curve = loopsim.parse(SCHMITT).trace("glow", watch="drive")
    assert len(curve.folds) == 2 and curve.over_range
    kelvin = mpmath.mpf("298.15")
    vt = mpmath.mpf("1.380649e-23") * kelvin / mpmath.mpf("1.602176634e-19")  # SI brochure, 9th edition: exact constants
    with mpmath.workdps(30):
        for found in curve.folds:
            start = [found.at, *(found.nets[net] for net in ("c1", "b2", "drive", "tail"))]

            def equations(glow, c1, b2, drive, tail):
                values = [mpmath.mpf(v) for v in (glow, c1, b2, drive, tail)]
                balance = _emitter_coupled(*values, vt)
                step = mpmath.mpf("1e-12")
                columns = []
                for k in range(1, 5):
                    ends = []
                    for sign in (1, -1):
                        moved = list(values)
                        moved[k] += sign * step
                        ends.append(_emitter_coupled(*moved, vt))
                    columns.append([(a - b) / (2 * step) for a, b in zip(*ends, strict=True)])
                jacobian = mpmath.matrix(4, 4)
                for k, column in enumerate(columns):
                    for i, entry in enumerate(column):
                        jacobian[i, k] = entry * 1000
                return [*balance, mpmath.det(jacobian)]

            exact = mpmath.findroot(equations, start, tol=1e-18, verify=False)
            assert found.at == pytest.approx(float(exact[0]), rel=1e-9)


@pytest.mark.parametrize("a", [1.5, 2.0, 5.0])
def test_folds_of_a_saturating_amplifier_with_positive_feedback(a: float) -> None:
    # u = x - tanh(a x): folds at u = -+(sqrt(1 - 1/a) - acosh(sqrt a) / a), closed form
    text = f"""circuit amp "a saturating loop"
let u = 0 A in -1.5 A .. 1.5 A
gnd -> push: u -> x
gnd -> back: 1 A * tanh({a} * x / 1 V) -> x
x -- r: 1 ohm -- gnd
x -- c: 1 F -- gnd
"""
    curve = loopsim.parse(text).trace("u", watch="x")
    reach = np.sqrt(1 - 1 / a) - np.arccosh(np.sqrt(a)) / a
    assert [f.at for f in curve.folds] == pytest.approx([-reach, reach], rel=1e-9)
    assert curve.over_range


def test_the_hold_voltage_of_a_latch_falls_as_it_warms() -> None:
    """Two transistors that hold each other let go at a lower supply when warm: a junction needs less voltage (common practice,
    about -2 mV/K a junction)."""
    circuit = loopsim.load("circuits/switches/kiln_trip.loop")
    holds = []
    for ambient in (0.0, 25.0, 60.0):
        folds = [f.at for f in circuit.trace("supply", range_budget=0.0, ambient=ambient).folds]
        holds.append(min(folds))
    slopes = np.diff(holds) / np.diff([0.0, 25.0, 60.0])
    assert np.all((slopes < -0.5e-3) & (slopes > -10e-3))


def test_ambient_and_a_field_of_a_kind_can_be_the_abscissa() -> None:
    text = SCHMITT.replace("let glow = 1.8 V in 0 V .. 4 V", "let glow = 1.8 V\nlet beta = 200 in 50 .. 400").replace("= 200,", "= beta,")
    circuit = loopsim.parse(text)
    by_gain = circuit.trace("beta", watch="drive")
    assert by_gain.complete and not by_gain.over_range
    warm = circuit.trace("ambient", over=(0.0, 50.0), watch="drive", stations=3)
    assert warm.complete and len(warm.branches) >= 3
    at_end = circuit.states(ambient=50.0)
    ends = sorted(float(b.nets["drive"][k]) for b in warm.branches for k in (0, -1) if b.values[k] == 50.0)
    assert ends == pytest.approx(sorted(point["drive"] for point in at_end), abs=1e-6)


def test_along_a_resistance_a_fold_beside_an_undecided_state_is_not_called_unstable_on_both_sides() -> None:
    # just above the fold the second stable state rests on strays; a little further it is stable for all of them
    text = SCHMITT.replace("let glow = 1.8 V in 0 V .. 4 V", "let glow = 1.8 V\nlet r_tail = 470 ohm in 47 ohm .. 4.7 kohm")
    circuit = loopsim.parse(text.replace("r_e: 470 ohm", "r_e: r_tail"))
    curve = circuit.trace("r_tail", watch="drive")
    assert curve.complete and not curve.over_range
    assert [f.direction for f in curve.folds] == ["falling", "rising"] and all(f.from_stable for f in curve.folds)
    for found, counts in zip(curve.folds, [(1, 3), (3, 1)], strict=True):
        assert tuple(len(circuit.states(r_tail=found.at * (1 + side))) for side in (-1e-3, 1e-3)) == counts
    known = curve.thresholds("drive")
    assert known.falling == pytest.approx(curve.folds[0].at) and known.rising == pytest.approx(curve.folds[1].at)


def test_where_a_let_enters_squared_there_is_a_pair_of_folds_on_each_side() -> None:
    # a^2 - 1/2 + x - x^3 = 0: folds where a^2 - 1/2 = -+2 / 3^1.5 (the cusp's power law)
    curve = loopsim.parse(CUSP.replace("push: a ->", "push: a * a / 1 A - 0.5 A ->")).trace("a", watch="x")
    inner, outer = np.sqrt(0.5 - 2 / 3**1.5), np.sqrt(0.5 + 2 / 3**1.5)
    assert [f.at for f in curve.folds] == pytest.approx([-outer, -inner, inner, outer], rel=1e-9)
    assert curve.complete and not curve.over_range


def test_two_gates_on_one_float_each_have_thresholds_of_their_own() -> None:
    curve = loopsim.load("circuits/comparators/tide_gauge_gates.loop").trace("tide")
    sea, land = curve.thresholds("sea_gate"), curve.thresholds("land_gate")
    assert len(curve.folds) >= 4
    assert sea.falling < land.falling and sea.rising < land.rising
    # common practice: hysteresis = swing R_in / R_fb
    assert sea.hysteresis == pytest.approx(land.hysteresis, abs=5e-3) == pytest.approx(4.9 * 10 / 47, abs=0.03)


def test_a_closed_curve_between_two_stations_is_found_by_the_proof() -> None:
    """Two level switches have nine states where both may be on or off (a product of three and three); a part of them lies on a closed
    curve that no station meets and no ride reaches."""
    circuit = loopsim.load("circuits/comparators/tide_gauge_gates.loop")
    without = circuit.trace("tide", range_budget=0.0)
    assert [branch.closed for branch in without.branches] == [False] and not without.over_range
    curve = circuit.trace("tide", budget=120.0, range_budget=100.0)
    assert sorted(branch.closed for branch in curve.branches) == [False, True]
    assert curve.over_range and curve.gaps == ()
    assert len(circuit.states(tide=2.75)) == 9
    crossed = sum(int(np.count_nonzero(np.diff(np.sign(branch.values - 2.75)))) for branch in curve.branches)
    assert crossed == 9


def test_what_cannot_be_traced_is_said() -> None:
    circuit = loopsim.parse(CURVE)
    with pytest.raises(CircuitError, match="unknown-let"):
        circuit.trace("suply")
    with pytest.raises(CircuitError, match="unknown-net"):
        circuit.trace("supply", watch="nowhere")
    with pytest.raises(CircuitError, match="has to rise"):
        circuit.trace("supply", over=(3.0, 3.0))
    with pytest.raises(CircuitError, match="no range"):
        circuit.trace("ambient")


def test_a_budget_that_ends_leaves_no_claim() -> None:
    curve = loopsim.parse(CURVE).trace("supply", budget=0.0)
    assert not curve.complete and not curve.over_range


def test_trip_points_of_samples_are_the_folds_of_each(two: Trace) -> None:
    circuit = loopsim.load("circuits/comparators/cistern_pump.loop")
    spread = circuit.trip_points("level", samples=300, seed=3, watch="out")
    assert spread.lost == 0 and spread.at.shape == (300, 2)
    for k in (0, 17, 299):
        own = circuit.trace("level", range_budget=0.0, stations=1, **dict(zip(spread.parameters, spread.samples[k], strict=True)))
        assert spread.threshold("out", "rising")[k] == pytest.approx(own.thresholds("out").rising, rel=1e-9)
        assert spread.threshold("out", "falling")[k] == pytest.approx(own.thresholds("out").falling, rel=1e-9)
    low, high = spread.limits("out", "rising")
    assert low < spread.nominal.thresholds("out").rising < high
    again = circuit.trip_points("level", samples=300, seed=3, watch="out", nominal=spread.nominal)
    assert np.array_equal(again.at, spread.at)


def test_sensitivities_of_trip_points_are_their_differences() -> None:
    circuit = loopsim.load("circuits/comparators/ferry_lamp_dusk.loop")
    spread = circuit.trip_points("glow", samples=1)
    for name, slope in spread.sensitivity("drive", "falling").items():
        value = float(circuit.parameters[name].value.value)
        ends = circuit.trip_points("glow", samples={name: [value * (1 - 1e-5), value * (1 + 1e-5)]}, nominal=spread.nominal)
        first, second = ends.threshold("drive", "falling")
        assert slope == pytest.approx((second - first) / (2e-5 * value), rel=1e-4, abs=1e-9)


def test_a_fold_that_a_sample_does_not_have_is_lost_and_not_taken_from_elsewhere() -> None:
    # the cusp's power law; below b = 0 there is no fold
    b = np.array([3.0, 1.0, 0.1, 0.01, -0.01, -0.1, -1.0])
    spread = loopsim.parse(CUSP).trip_points("a", samples={"b": b}, watch="x")
    assert spread.lost == 6 and np.all(np.isnan(spread.at[4:]))
    assert spread.at[:4, 1] == pytest.approx(2 * (b[:4] / 3) ** 1.5, rel=1e-9)
    assert spread.at[:4, 0] == pytest.approx(-spread.at[:4, 1], rel=1e-9)


@pytest.mark.parametrize("count", [0, -4])
def test_no_samples_are_refused(count: int) -> None:
    with pytest.raises(ValueError, match="1 or more"):
        loopsim.parse(CUSP).trip_points("a", samples=count)


def test_trip_points_refuse_what_they_cannot_move(two: Trace) -> None:
    circuit = loopsim.load("circuits/comparators/cistern_pump.loop")
    with pytest.raises(AnalysisError, match="no-fold"):
        circuit.trip_points("level", over=(6.0, 8.0))
    with pytest.raises(AnalysisError, match="not-a-source"):
        circuit.trip_points("r_fb.resistance", over=(40e3, 50e3))
    with pytest.raises(CircuitError, match="unknown-let"):
        circuit.trip_points("level", samples={"nothing": [1.0]})
    with pytest.raises(KeyError):
        circuit.trip_points("level", samples=1).threshold("mid", "rising")


def test_a_circuit_without_nonlinear_parts_has_one_branch_that_is_proved():
    text = "circuit divider\nlet level = 1 V in 0 V .. 2 V\ngnd -> v1: level -> a -- r1: 1 kohm -- b -- r2: 1 kohm -- gnd\n"
    found = loopsim.parse(text).trace("level")
    assert found.over_range
    assert {count for _, count in found.counts} == {1}
    assert found.folds == ()


DELAYED = """circuit delayed "a divider behind a ramp"
let rise = 1 ms in 1 us .. 10 s
gnd -> rail: ramp(from = 0 V, to = 5 V, start = 0 s, duration = rise) -> vcc
vcc -- r_top: 22 kohm -- half -- r_bottom: 22 kohm -- gnd
"""


def test_a_let_is_assembled_inside_its_range_alone_and_a_dead_circuit_is_followed() -> None:
    # 60 us below 1 us there is no duration: the step past the end must not ask for one
    curve = loopsim.parse(DELAYED).trace("rise")
    assert len(curve.branches) == 1 and curve.complete and not curve.notes
    assert curve.branches[0].values[[0, -1]].tolist() == [1e-6, 10.0]


def test_beyond_its_range_a_family_goes_on_in_a_straight_line() -> None:
    text = 'circuit c "load"\nlet load = 1 kohm in 100 ohm .. 10 kohm\ngnd -> s: 1 mA -> out\nout -- r: load -- gnd\n'
    family = Family(loopsim.parse(text), {}, "load", 100.0, 10e3)
    x = np.full(family.system(100.0).n, 0.3)
    for level in (100.0 - 40.0, 10e3 + 300.0):
        inside = float(np.clip(level, 100.0, 10e3))
        expected = family.residual(x, inside) + (level - inside) * family.slope(x, inside)
        np.testing.assert_allclose(family.residual(x, level), expected, rtol=1e-12)
        step = 1e-4
        columns = [(family.residual(x + step * e, level) - family.residual(x - step * e, level)) / (2 * step) for e in np.eye(len(x))]
        np.testing.assert_allclose(family.jacobian(x, level), np.transpose(columns), rtol=1e-6, atol=1e-15)


def test_a_branch_that_is_not_followed_to_its_end_is_told(monkeypatch: pytest.MonkeyPatch) -> None:
    from loopsim.analyses import trace_curves

    real = trace_curves.follow
    monkeypatch.setattr(trace_curves, "follow", lambda *words: dataclasses.replace(real(*words), end="stuck"))
    curve = loopsim.parse(DELAYED).trace("rise")
    assert "1 of 1 branches are not followed to their ends: no step along them succeeded" in curve.notes


def test_no_range_is_complete_where_a_branch_is_not_followed_to_its_end(monkeypatch: pytest.MonkeyPatch) -> None:
    from loopsim.analyses import trace_curves

    text = 'circuit line "a divider"\nlet supply = 1 V in 0 V .. 9 V\ngnd -> s: supply -> a\na -- r1: 1 kohm -- b -> d: diode() -> gnd\n'
    assert loopsim.parse(text).trace("supply").over_range
    real = trace_curves.follow
    monkeypatch.setattr(trace_curves, "follow", lambda *words: dataclasses.replace(real(*words), end="stuck"))
    curve = loopsim.parse(text).trace("supply")
    assert curve.complete and not curve.over_range


STEEP = """circuit steep "a gain of a thousand"
let level = 2 V in 0 V .. 5 V
gnd -> probe: level -> sense
sense -- r: 1 kohm -- gnd
gnd -> amp: 1000 * sense - 2350 V -> a
a -- r_a: 1 kohm -- gnd
"""


def test_a_branch_that_is_within_the_box_between_two_stations_alone_is_not_missed() -> None:
    """Within +/- 50 V the net is only where the level is within 0.05 V of 2.35 V, and no station is there."""
    circuit = loopsim.parse(STEEP)
    curve = circuit.trace("level", watch="a", box=50.0)
    assert all(count == 0 for _, count in curve.counts)
    assert len(circuit.states(level=2.36, box=50.0)) == 1
    assert len(curve.branches) == 1 and curve.over_range
    (branch,) = curve.branches
    assert np.interp(2.36, branch.values, branch.nets["a"]) == pytest.approx(10.0, abs=1e-6)


@pytest.mark.parametrize("box", [3.0, 10.0])
def test_a_branch_may_leave_the_box(box: float) -> None:
    circuit = loopsim.load("circuits/switches/kiln_trip.loop")
    curve = circuit.trace("supply", box=box)
    assert [count for value, count in curve.counts] == [1 if value == 0.0 else 3 if value < box else 0 for value, _ in curve.counts]
    assert curve.over_range and len(curve.branches) == 2 and len(curve.folds) == 1


TURN = 2.0 / 3.0**1.5  # of the cusp at b = 1, textbook


@pytest.mark.parametrize("over", [(-TURN, TURN), (TURN, 1.0), (-1.0, TURN), (TURN * (1.0 - 1e-12), 1.0), (-5.0 * TURN, 5.0 * TURN)])
def test_a_fold_exactly_on_a_station_leaves_the_range_undecided(over: tuple[float, float]) -> None:
    curve = loopsim.parse(CUSP).trace("a", watch="x", over=over, stations=9)
    assert not curve.over_range and curve.notes
    for value in np.random.default_rng(5).uniform(*over, 9).tolist():
        roots = np.roots([1.0, 0.0, -1.0, -value])
        crossed = sum(int(np.count_nonzero(np.diff(np.sign(branch.values - value)))) for branch in curve.branches)
        assert crossed == np.count_nonzero(np.abs(roots.imag) < 1e-9)
