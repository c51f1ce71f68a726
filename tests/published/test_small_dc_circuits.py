"""Small circuits with one known answer each: bridge, Lambert W, bias, square law, differential pair.

Sources beside each test; recomputed in extended precision where no digits are published.
"""

import mpmath
import numpy as np
import pytest
from array_systems import Kind, Row, solve, system_of, unit

import loopsim

THERMAL = 1.380649e-23 / 1.602176634e-19 * 298.15  # V, k T / e at 25 degC (CODATA 2018, exact)


def only(text, **lets):
    """The one operating point of a circuit, proved to be the only one."""
    points = loopsim.parse(text).states(**lets)
    assert points.complete
    assert len(points) == 1
    return points[0]


def test_bridge_with_one_diode():
    """M. Newman, Computational Physics, 2013, exercise 6.17; the book prints no answer: recomputed to 20 digits."""
    point = only(
        f"""circuit bridge "Two dividers and a diode"
        kind bridge_diode = diode(saturation_current = 3 nA, ideality = {0.05 / THERMAL!r})
        gnd -> source: 5 V -> top
        top -- r1: 1 kohm -- left -- r2: 4 kohm -- gnd
        top -- r3: 3 kohm -- right -- r4: 2 kohm -- gnd
        left -> d1: bridge_diode -> right
        """
    )
    assert point["left"] == pytest.approx(3.4469546188585743799, abs=1e-12)
    assert point["right"] == pytest.approx(2.8295680717121384302, abs=1e-12)
    assert point["left"] - point["right"] == pytest.approx(0.61738654714643595, abs=1e-12)


# T. C. Banwell, A. Jayakumar, Electronics Letters 36 (2000) 291-292, from memory. Vs, R, Is, n V_T, I (recomputed)
LAMBERT = (
    (5.0, 1e3, 1e-14, 0.0258519997864355, 0.004307456372506470046),
    (1.0, 1e3, 1e-15, 0.025, 0.00033645662320162543043),
    (0.5, 100.0, 1e-12, 0.025852, 0.00014386340925499529455),
    (5.0, 1e6, 1e-14, 0.025852, 4.4849915186511689286e-6),
    (10.0, 100.0, 1e-9, 0.05, 0.090837707475528723351),
    (-5.0, 1e3, 1e-14, 0.025852, -1.0e-14),
)


def lambert_current(supply, ohms, saturation, scale):
    """I = (n V_T / R) W((Is R / n V_T) exp((Vs + Is R) / n V_T)) - Is."""
    with mpmath.workdps(50):
        V, R, I, v = (mpmath.mpf(a) for a in (supply, ohms, saturation, scale))
        return v / R * mpmath.lambertw(I * R / v * mpmath.exp((V + I * R) / v)) - I


@pytest.mark.parametrize("row", LAMBERT)
def test_diode_and_resistor_agree_with_lambert_w(row):
    supply, ohms, saturation, scale, tabled = row
    exact = lambert_current(supply, ohms, saturation, scale)
    assert float(exact) == pytest.approx(tabled, rel=1e-13)
    # the ideality is the double whose product with the thermal voltage is meant; take the product as computed
    ideality = scale / THERMAL
    exact = lambert_current(supply, ohms, saturation, mpmath.mpf(ideality) * mpmath.mpf(THERMAL))
    point = only(
        f"""circuit lambert "Diode and resistor"
        kind junction = diode(saturation_current = {saturation!r} A, ideality = {ideality!r})
        gnd -> source: {supply!r} V -> top -- r1: {ohms!r} ohm -- anode -> d1: junction -> gnd
        """
    )
    voltage = float(mpmath.mpf(supply) - exact * mpmath.mpf(ohms))
    assert point["anode"] == pytest.approx(voltage, rel=1e-10)
    current = (point["top"] - point["anode"]) / ohms
    assert current == pytest.approx(float(exact), rel=1e-10, abs=1e-15 * abs(supply))


def test_four_resistor_bias():
    """Derived, Lambert W; forward-active transistor with Ib = (Is / bF) (exp(vBE / VT) - 1), Ic = bF Ib. The full
    device's reverse
    current at 5.8 V of reverse bias is a saturation current, 1e-15 A: below the tolerance."""
    point = only(
        f"""circuit bias "Four resistors and a transistor"
        kind stage = bipolar_npn(saturation_current = 1 fA, forward_gain = 100, reverse_gain = 1, ideality = {0.025852
        / THERMAL!r})
        gnd -> source: 12 V -> vcc
        vcc -- r1: 100 kohm -- base -- r2: 20 kohm -- gnd
        vcc -- rc: 4.7 kohm -- collector
        emitter -- re: 1 kohm -- gnd
        q1: stage(collector = collector, base = base, emitter = emitter)
        """
    )
    assert point["base"] == pytest.approx(1.81820999564527508, abs=1e-9)
    assert point["emitter"] == pytest.approx(1.10164742638963299, abs=1e-9)
    assert point["collector"] == pytest.approx(6.87352187719675737, abs=1e-9)
    assert point["base"] - point["emitter"] == pytest.approx(0.716562569255642092, abs=1e-9)


def test_square_law_in_arrays():
    """Derived: I = (k/2) (V - Vt)^2 with R to VDD; the quadratic has a second root with the channel off, which the
    square law's own
    condition V > Vt rules out, and no more."""
    k, threshold, ohms, supply = 2e-4, 1.0, 1e4, 5.0
    # (k/2) (V^2 - 2 Vt V + Vt^2) + V / R = VDD / R
    row = Row(Kind.POLYNOMIAL, [1.0], [1.0], (-k * threshold, 0.5 * k))
    system = system_of([[1 / ohms]], [supply / ohms - 0.5 * k * threshold**2], [row])
    found = solve(system)
    assert found.complete
    assert len(found.x) == 2
    on = found.x[found.x[:, 0] > threshold, 0]
    assert on == pytest.approx([2.5615528128088302749], abs=1e-13)
    assert 0.5 * k * (on[0] - threshold) ** 2 == pytest.approx(2.4384471871911697e-4, rel=1e-13)


def inverter(p_transconductance):
    return f"""circuit inverter "Inverter tied to itself"
        kind pull_down = mosfet_n(threshold = 0.43 V, transconductance = 1 mA/V^2, slope_factor = 1)
        kind pull_up = mosfet_p(threshold = 0.4 V, transconductance = {p_transconductance} mA/V^2, slope_factor = 1)
        gnd -> rail: 2.5 V -> vdd
        up: pull_up(drain = middle, gate = middle, source = vdd, body = vdd)
        down: pull_down(drain = middle, gate = middle, source = gnd, body = gnd)
        """


@pytest.mark.parametrize(("ratio", "threshold", "tolerance"), [(1, 1.265, 1e-5), (2, 0.98666667, 2e-3)])
def test_switching_voltage_of_an_inverter(ratio, threshold, tolerance):
    """Square law, derived: VM = (VDD - |Vtp| + r Vtn) / (1 + r), r = sqrt(kn / kp). The charge-sheet law is the square
    law plus terms of
    the order exp(-(V - Vt) / (2 V_T)); with r = 1 they cancel by symmetry."""
    point = only(inverter(1 / ratio**2))
    assert point["middle"] == pytest.approx(threshold, abs=tolerance)


def test_textbook_diode():
    """A. Sedra, K. Smith, Microelectronic Circuits, from memory: 5 V, 1 kohm, 0.7 V at 1 mA and 60 mV a decade: 4.262
    mA, 0.738 V."""
    scale = float(0.06 / np.log(10.0))
    saturation = float(1e-3 / np.expm1(0.7 / scale))
    point = only(
        f"""circuit textbook "Diode by hand"
        kind hand_diode = diode(saturation_current = {saturation!r} A, ideality = {scale / THERMAL!r})
        gnd -> source: 5 V -> top -- r1: 1 kohm -- anode -> d1: hand_diode -> gnd
        """
    )
    assert point["anode"] == pytest.approx(0.738, abs=5e-4)
    assert (5 - point["anode"]) / 1e3 == pytest.approx(4.262e-3, abs=1e-6)


@pytest.mark.parametrize("multiple", [-3.0, -1.0, 0.0, 0.5, 1.0, 4.0])
def test_differential_pair_follows_tanh(multiple):
    """Textbook: the difference of the collector currents is I_EE tanh(v_id / (2 V_T)); v_id = V_T gives
    0.462117157260009759."""
    drive = multiple * THERMAL
    point = only(
        f"""circuit pair "Differential pair without base currents to speak of"
        kind ideal_npn = bipolar_npn(saturation_current = 1 fA, forward_gain = 1e9, reverse_gain = 1)
        gnd -> rail: 10 V -> vcc
        vcc -- r1: 1 kohm -- left
        vcc -- r2: 1 kohm -- right
        gnd -> drive: {drive!r} V -> base
        tail -> pull: 1 mA -> gnd
        q1: ideal_npn(collector = left, base = base, emitter = tail)
        q2: ideal_npn(collector = right, base = gnd, emitter = tail)
        """
    )
    share = (point["right"] - point["left"]) / 1.0
    assert share == pytest.approx(np.tanh(multiple / 2), abs=2e-9)
    if multiple == 1.0:
        assert share == pytest.approx(0.462117157260009759, abs=2e-9)


def test_exponential_row_alone_agrees_with_lambert_w_over_twelve_decades():
    """x + (a / b) (exp(b x) - 1) = s: closed form by Lambert W at 60 seeded (a, b, s)."""
    random = np.random.default_rng(20)
    for _ in range(60):
        a, b, s = 10 ** random.uniform(-12, 0), random.uniform(1, 60), random.uniform(-3, 8)
        found = solve(system_of([[1.0]], [s], [Row(Kind.EXPONENTIAL, unit(1, 0, b), [a / b])]))
        assert found.complete
        assert len(found.x) == 1
        with mpmath.workdps(50):
            A, b_, s_ = mpmath.mpf(a / b), mpmath.mpf(b), mpmath.mpf(s)
            exact = s_ + A - mpmath.lambertw(A * b_ * mpmath.exp(b_ * (s_ + A))) / b_
        assert found.x[0, 0] == pytest.approx(float(exact), rel=1e-12, abs=1e-12)
