"""Thresholds, latches and linear dynamics with answers in closed form.

Textbook formulas, from memory unless a source is named; every number computed here.
"""

import mpmath
import numpy as np
import pytest
from array_systems import Kind, Row, assert_points, solve, system_of, unit

import loopsim

# a: (x, u) of the fold of u = x - tanh(a x); x* of x = tanh(a x) and its eigenvalue -1 + a (1 - x*^2)
SATURATING = {
    1.5: (0.43898596564160557, 0.138364303548020195, 0.85855963664011036215, -0.605686974501397503),
    2.0: (0.440686793509771513, 0.266419987676776012, 0.95750402407726874068, -0.833627912248325673),
    5.0: (0.288727095035762068, 0.60570009596415381, 0.99990912171523255094, -0.999091258446638721),
}


def saturating(a, drive=0.0):
    """x' = drive - x + tanh(a x)."""
    return system_of([[1.0]], [drive], [Row(Kind.SATURATION, [a], [-1.0])], C=[[1.0]])


@pytest.mark.parametrize("a", SATURATING)
def test_folds_of_a_saturating_amplifier_with_positive_feedback(a):
    x, u, _, _ = SATURATING[a]
    assert x == pytest.approx(np.arccosh(np.sqrt(a)) / a, rel=1e-15)
    assert u == pytest.approx(np.sqrt(1 - 1 / a) - np.arccosh(np.sqrt(a)) / a, rel=1e-14)
    for sign in (-1, 1):
        inside, outside = solve(saturating(a, sign * u * (1 - 1e-6))), solve(saturating(a, sign * u * (1 + 1e-6)))
        assert inside.complete
        assert outside.complete
        assert (len(inside.x), len(outside.x)) == (3, 1)


@pytest.mark.parametrize("a", SATURATING)
def test_exactly_at_a_fold_nothing_is_called_complete_with_a_wrong_count(a):
    """The double nearest the fold lies on one side of it, so a proof may come out either way, but never with two points."""
    found = solve(saturating(a, SATURATING[a][1]), budget=10.0)
    assert not found.complete or len(found.x) in (1, 3)


@pytest.mark.parametrize("a", SATURATING)
def test_equilibria_and_eigenvalues_of_a_saturating_latch(a):
    from loopsim.analyses.stability import judge

    _, _, star, eigenvalue = SATURATING[a]
    found = solve(saturating(a))
    assert found.complete
    assert_points(found.x, np.array([[-star], [0.0], [star]]), 1e-14)
    verdicts = judge(saturating(a), found.x)
    assert [v.stable for v in verdicts] == [True, False, True]
    rates = [v.growth_rate for v in verdicts]
    assert rates == pytest.approx([eigenvalue, a - 1, eigenvalue], rel=1e-12)


@pytest.mark.parametrize("a", [0.5, 0.9, 0.999])
def test_below_a_gain_of_one_there_is_no_latch(a):
    found = solve(saturating(a))
    assert found.complete
    assert found.x[:, 0] == pytest.approx([0.0], abs=1e-12)


@pytest.mark.parametrize("sign", [-1, 1])
def test_folds_of_the_cubic_resistor(sign):
    """i = v^3 / 3 - v driven by a current: folds at i = +-2/3; the jump lands at v = +-2."""
    row = Row(Kind.POLYNOMIAL, [1.0], [1.0], (-1.0, 0.0, 1 / 3))
    for factor, count in ((1 - 1e-6, 3), (1 + 1e-6, 1)):
        found = solve(system_of([[0.0]], [sign * 2 / 3 * factor], [row]))
        assert found.complete
        assert len(found.x) == count
    assert found.x[0, 0] == pytest.approx(sign * 2.0, abs=1e-5)


NON_INVERTING = """circuit non_inverting "Comparator with hysteresis, input at the positive end"
let drive = 0 V in -9 V .. 9 V
gnd -> upper: 9 V -> vpos
vneg -> lower: 9 V -> gnd
gnd -> input: drive -> sense -- r_in: 12 kohm -- plus -- r_fb: 33 kohm -- out
u1: opamp(plus = plus, minus = gnd, out = out, high = vpos, low = vneg, gain = 100000, headroom = 50 mV, knee = 1 mV)
"""

INVERTING = """circuit inverting "Comparator with hysteresis, input at the negative end"
let drive = 0 V in -9 V .. 9 V
gnd -> upper: 9 V -> vpos
vneg -> lower: 9 V -> gnd
gnd -> input: drive -> sense
gnd -> reference: 1 V -> ref -- r_1: 10 kohm -- plus -- r_2: 33 kohm -- out
u1: opamp(plus = plus, minus = sense, out = out, high = vpos, low = vneg, gain = 100000, headroom = 50 mV, knee = 1 mV)
"""

SATURATED = 8.95  # V
KNEES = 10e-3  # V, ten knee voltages: the clamp turns over about k ln(r / b) before the rail


@pytest.mark.parametrize(
    ("text", "low", "high"),
    [
        # V_sat R_in / R_fb = 3.2545 V
        (NON_INVERTING, -SATURATED * 12 / 33, SATURATED * 12 / 33),
        # +-V_sat R_1 / (R_1 + R_2) + V_ref R_2 / (R_1 + R_2)
        (INVERTING, (33 - 10 * SATURATED) / 43, (33 + 10 * SATURATED) / 43),
    ],
    ids=["non-inverting", "inverting"],
)
def test_trip_points_of_a_comparator_with_hysteresis(text, low, high):
    """Common practice: the ideal trip points within a few knee voltages; three points between them, one outside."""
    circuit = loopsim.parse(text)
    for at, count in ((low - KNEES, 1), (low + KNEES, 3), (high - KNEES, 3), (high + KNEES, 1)):
        points = circuit.states(drive=at)
        assert points.complete
        assert len(points) == count
        if count == 3:
            assert [p.stable for p in points] == [True, False, True]


def test_latch_of_cross_coupled_transistors_against_extended_precision():
    """Two npn transistors, Ebers-Moll in transport form, resistors; the three points by mpmath.findroot from each
    side, to 1e-9."""
    text = """circuit latch "Cross-coupled pair"
    kind device = bipolar_npn(saturation_current = 10 fA, forward_gain = 100, reverse_gain = 2)
    gnd -> rail: 5 V -> vcc
    vcc -- rc1: 1 kohm -- c1 -- rb2: 10 kohm -- b2
    vcc -- rc2: 1 kohm -- c2 -- rb1: 10 kohm -- b1
    q1: device(collector = c1, base = b1, emitter = gnd)
    q2: device(collector = c2, base = b2, emitter = gnd)
    """
    points = loopsim.parse(text).states()
    assert points.complete
    assert [p.stable for p in sorted(points, key=lambda p: p["c1"])] == [True, False, True]
    with mpmath.workdps(40):
        mp = mpmath.mpf
        thermal = mp("1.380649e-23") / mp("1.602176634e-19") * mp("298.15")
        saturation = mp("1e-14")

        def balance(c1, c2, b1, b2):
            def currents(c, b):
                forward = saturation * mpmath.expm1(b / thermal)
                reverse = saturation * mpmath.expm1((b - c) / thermal)
                return forward - reverse - reverse / 2, forward / 100 + reverse / 2

            i1, j1 = currents(c1, b1)
            i2, j2 = currents(c2, b2)
            return [
                (c1 - 5) / 1000 + (c1 - b2) / 10000 + i1,
                (c2 - 5) / 1000 + (c2 - b1) / 10000 + i2,
                (b1 - c2) / 10000 + j1,
                (b2 - c1) / 10000 + j2,
            ]

        starts = ((0.05, 4.6, 0.72, 0.05), (0.95, 0.95, 0.70, 0.70), (4.6, 0.05, 0.05, 0.72))
        exact = np.array([[float(a) for a in mpmath.findroot(balance, [mp(a) for a in s])] for s in starts])
    assert len({tuple(np.round(row, 6)) for row in exact}) == 3
    assert_points(np.array([[p[n] for n in ("c1", "c2", "b1", "b2")] for p in points]), exact, 1e-9)


def bridge(gain, *, w0=1.0):
    """Wien bridge round an ideal amplifier; unknowns: voltage at the input, voltage of the series capacitor."""
    # series branch: current (K v - u - v) / R = C u'; node: C v' + v / R = C u'
    C = np.array([[1.0, -1.0], [0.0, 1.0]]) / w0
    G = np.array([[1.0, 0.0], [1.0 - gain, 1.0]])
    return system_of(G, np.zeros(2), [], C=C)


@pytest.mark.parametrize("gain", [1.0, 2.5, 2.99, 3.01, 3.1, 4.0, 6.0])
def test_eigenvalues_of_the_wien_bridge(gain):
    """s^2 + (3 - K) w0 s + w0^2 = 0; K = 3.1 gives 0.05 +- 0.998749217771909 i."""
    from loopsim.analyses.stability import judge

    verdict = judge(bridge(gain), np.zeros((1, 2)))[0]
    expected = np.roots([1.0, 3.0 - gain, 1.0])
    assert np.allclose(np.sort_complex(verdict.eigenvalues), np.sort_complex(expected.astype(complex)), rtol=1e-10, atol=1e-10)
    assert verdict.stable is (gain < 3)
    if gain == 3.1:
        assert verdict.eigenvalues[0].real == pytest.approx(0.05, rel=1e-12)
        assert abs(verdict.eigenvalues[0].imag) == pytest.approx(0.998749217771909, rel=1e-12)
        assert verdict.text.startswith("unstable with these dynamics")


@pytest.mark.parametrize("w0", [1e-2, 1e3, 1e9])
def test_eigenvalues_of_the_wien_bridge_grow_with_its_frequency(w0):
    from loopsim.analyses.stability import judge

    for gain in (2.9, 3.1):
        verdict = judge(bridge(gain, w0=w0), np.zeros((1, 2)))[0]
        expected = np.roots([1.0, 3.0 - gain, 1.0]) * w0
        assert np.allclose(np.sort_complex(verdict.eigenvalues), np.sort_complex(expected), rtol=1e-10)
        assert verdict.stable is (gain < 3)


WIEN = """circuit wien "Bridge oscillator with everything in it"
let top = 21 kohm
gnd -> upper: 9 V -> vpos
vneg -> lower: 9 V -> gnd
out -- r_1: 10 kohm -- joint -- c_1: 10 nF -- plus
plus -- r_2: 10 kohm -- gnd
plus -- c_2: 10 nF -- gnd
out -- r_top: top -- minus -- r_bottom: 10 kohm -- gnd
u1: opamp(plus = plus, minus = minus, out = out, high = vpos, low = vneg, gain = 1e7, gain_bandwidth = 1 THz, headroom = 50 mV)
"""


@pytest.mark.parametrize("gain", [2.5, 2.9, 3.1, 3.5])
def test_slow_eigenvalues_of_a_wien_circuit(gain):
    """The same closed form in a circuit file; the amplifier is fast enough that it moves them by less than 1e-4."""
    points = loopsim.parse(WIEN).states(top=(gain - 1.0) * 1e4)
    assert points.complete
    assert len(points) == 1
    assert points[0].stable is (gain < 3)
    w0 = 1e4
    slow = sorted((v for v in points[0].eigenvalues if abs(v) < 1e6), key=lambda v: v.imag)
    assert np.allclose(slow, sorted(np.roots([1.0, 3.0 - gain, 1.0]) * w0, key=lambda v: v.imag), rtol=1e-4)


def conditional(gain):
    """Closed loop s^3 + K (s + 10)^2 = 0 as a chain of integrators."""
    G = -np.array([[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [-100.0 * gain, -20.0 * gain, -gain]])
    return system_of(G, np.zeros(3), [], C=np.eye(3))


@pytest.mark.parametrize(("gain", "stable"), [(2.0, False), (4.9, False), (5.1, True), (20.0, True)])
def test_loop_gain_above_one_at_180_degrees_may_be_stable(gain, stable):
    """Loop K (s + 10)^2 / s^3: unstable for K < 5, stable above (conditional stability, H. Nyquist 1932)."""
    from loopsim.analyses.stability import judge

    verdict = judge(conditional(gain), np.zeros((1, 3)))[0]
    assert verdict.stable is stable
    known = {20.0: (-6.388969195, -6.805515403 + 16.33170241j), 2.0: (-4.109429735, 1.054714868 + 6.896095259j)}
    if gain in known:
        real, pair = known[gain]
        expected = np.sort_complex(np.array([real, pair, np.conj(pair)]))
        assert np.allclose(np.sort_complex(verdict.eigenvalues), expected, rtol=1e-8)


def test_marginal_loop_is_undecided():
    from loopsim.analyses.stability import judge

    assert judge(conditional(5.0), np.zeros((1, 3)))[0].stable is None


def test_phase_shift_oscillator_needs_a_gain_of_29():
    """Three high-pass sections RC = 1 with inverting gain K: at K = 29 the polynomial 30 s^3 + 6 s^2 + 5 s + 1 has
    roots -0.2 and
    +-0.408248290463863 i."""
    from loopsim.analyses.stability import judge

    def shifter(gain):
        # nets a, b, c; capacitors drive-a, a-b, b-c with the drive -K c; resistors to ground
        C = np.array([[2.0, -1.0, gain], [-1.0, 2.0, -1.0], [0.0, -1.0, 1.0]])
        return system_of(np.eye(3), np.zeros(3), [], C=C)

    roots = judge(shifter(29.0), np.zeros((1, 3)))[0].eigenvalues
    expected = np.array([-0.2, 0.408248290463863j, -0.408248290463863j])
    assert np.allclose(np.sort_complex(roots), np.sort_complex(expected), atol=1e-9)
    assert judge(shifter(28.5), np.zeros((1, 3)))[0].stable is True
    assert judge(shifter(29.5), np.zeros((1, 3)))[0].stable is False


def comparators(k):
    """k independent comparators with hysteresis at one input."""
    cells = "\n".join(
        f"sense -- r_in{i}: 12 kohm -- plus{i} -- r_fb{i}: 33 kohm -- out{i}\n"
        f"u{i}: opamp(plus = plus{i}, minus = gnd, out = out{i}, high = vpos, low = vneg, gain = 100000, headroom = 50 mV)"
        for i in range(1, k + 1)
    )
    return f"""circuit comparators "Independent comparators"
gnd -> upper: 9 V -> vpos
vneg -> lower: 9 V -> gnd
gnd -> input: 0.1 V -> sense
{cells}
"""


@pytest.mark.parametrize("k", [1, 2, 3, 4, 5, pytest.param(6, marks=pytest.mark.slow)])
def test_independent_comparators_multiply(k):
    """Three points each, so 3^k in all, 2^k of them stable."""
    points = loopsim.parse(comparators(k)).states()
    assert points.complete
    assert len(points) == 3**k
    assert sum(p.stable is True for p in points) == 2**k
    patterns = {tuple(int(np.sign(round(p[f"out{i}"]))) for i in range(1, k + 1)) for p in points}
    assert len(patterns) == 3**k


def ring(n):
    stages = "\n".join(
        f"up{i}: pull_up(drain = x{(i + 1) % n}, gate = x{i}, source = vdd, body = vdd)\n"
        f"down{i}: pull_down(drain = x{(i + 1) % n}, gate = x{i}, source = gnd, body = gnd)"
        for i in range(n)
    )
    return f"""circuit ring "Ring of inverters"
kind pull_down = mosfet_n(threshold = 0.5 V, transconductance = 0.4 mA/V^2, slope_factor = 1.3, channel_modulation = 1 / 20 V)
kind pull_up = mosfet_p(threshold = 0.5 V, transconductance = 0.2 mA/V^2, slope_factor = 1.3, channel_modulation = 1 / 20 V)
gnd -> rail: 1.8 V -> vdd
{stages}
"""


@pytest.mark.parametrize(("n", "count"), [(3, 1), (5, 1), (4, 3), (8, 3), (16, 3)])
def test_rings_of_inverters(n, count):
    """Common practice: an odd ring of inverters has one operating point, an even one with gain three."""
    points = loopsim.parse(ring(n)).states()
    assert points.complete
    assert len(points) == count
    if count == 3:
        assert sum(p.stable is True for p in points) == 2


def test_rows_of_a_single_and_of_many_agree():
    """The unit of the harness: a polynomial of known roots, alone."""
    found = solve(system_of([[0.0]], [6.0], [Row(Kind.POLYNOMIAL, unit(1, 0), [1.0], (11.0, -6.0, 1.0))]))
    assert found.x[:, 0] == pytest.approx([1.0, 2.0, 3.0], abs=1e-13)
