"""Bipolar and field-effect transistors against their laws, written out again in long arithmetic."""

import mpmath
import numpy as np
import pytest
from probing import currents, probed, solve

from loopsim.devices.thermal import thermal_voltage
from loopsim.equations.assemble import assemble

VT = thermal_voltage(25.0)
K_OVER_E = mpmath.mpf("8.61733326214517744e-5")
BIPOLAR = {"saturation_current": 5e-15, "forward_gain": 180.0, "reverse_gain": 4.0, "ideality": 1.05}
# collector, base, emitter: cut off, forward active, saturated, reverse active, both junctions reverse biased
BIASES = [
    (5.0, 0.0, 0.0),
    (5.0, 0.65, 0.0),
    (0.08, 0.7, 0.0),
    (0.0, 0.62, 3.0),
    (2.0, -1.0, 1.0),
    (0.0, 0.0, 0.0),
]


def _ebers_moll(c, b, e, ambient, early=None):
    """(i_C, i_B, i_E) of an npn in transport form; J. J. Ebers, J. L. Moll 1954, from memory."""
    kelvin = mpmath.mpf(ambient) + mpmath.mpf("273.15")
    n, thermal = mpmath.mpf(BIPOLAR["ideality"]), K_OVER_E * kelvin
    cold = mpmath.mpf("298.15")
    drift = (kelvin / cold) ** 3 * mpmath.exp(mpmath.mpf("1.12") / K_OVER_E * (1 / cold - 1 / kelvin))
    saturation = mpmath.mpf(BIPOLAR["saturation_current"]) * drift ** (1 / n)
    forward = saturation * mpmath.expm1(mpmath.mpf(b - e) / (n * thermal))
    reverse = saturation * mpmath.expm1(mpmath.mpf(b - c) / (n * thermal))
    stretch = 1 if early is None else 1 - mpmath.mpf(b - c) / early
    transport = (forward - reverse) * stretch
    i_c = transport - reverse / BIPOLAR["reverse_gain"]
    i_b = forward / BIPOLAR["forward_gain"] + reverse / BIPOLAR["reverse_gain"]
    return i_c, i_b, -(i_c + i_b)


@pytest.mark.parametrize("early", [None, 60.0])
@pytest.mark.parametrize("ambient", [-20.0, 25.0, 85.0])
@pytest.mark.parametrize("bias", BIASES)
def test_npn_currents_follow_the_transport_form(bias, ambient, early):
    fields = BIPOLAR if early is None else {**BIPOLAR, "early_voltage": early}
    found = currents(
        "bipolar_npn", dict(zip(("collector", "base", "emitter"), bias, strict=True)), ambient, **fields
    )
    wanted = _ebers_moll(*bias, ambient, early)
    size = max(abs(float(value)) for value in wanted)
    for pin, value in zip(("collector", "base", "emitter"), wanted, strict=True):
        assert found[pin] == pytest.approx(float(value), rel=1e-9, abs=1e-14 * size + 1e-40)


@pytest.mark.parametrize("bias", BIASES)
def test_a_pnp_is_an_npn_with_every_sign_turned(bias):
    fields = {**BIPOLAR, "early_voltage": 45.0}
    volts = dict(zip(("collector", "base", "emitter"), bias, strict=True))
    npn = currents("bipolar_npn", volts, **fields)
    pnp = currents("bipolar_pnp", {pin: -value for pin, value in volts.items()}, **fields)
    assert pnp == {pin: -value for pin, value in npn.items()}


def test_early_voltage_is_where_the_output_lines_meet():
    # straight lines i_C(v_CB) at fixed v_BE meet i_C = 0 at v_CB = -V_A, up to the reverse current
    fields = {**BIPOLAR, "early_voltage": 50.0}
    first, second = (
        currents("bipolar_npn", {"collector": v, "base": 0.65, "emitter": 0.0}, **fields)["collector"]
        for v in (2.65, 8.65)
    )
    assert 2.0 - first * 6.0 / (second - first) == pytest.approx(-50.0, rel=1e-9)


def test_transistor_charges_stand_where_they_belong():
    system = assemble(
        probed(
            "bipolar_npn", {"collector": 2.0, "base": 0.66, "emitter": 0.0}, **BIPOLAR, transit_time=300e-12,
            base_emitter_capacitance=2e-12, base_collector_capacitance=1e-12,
        )
    )  # fmt: skip
    charge = dict(zip((name for _, name in system.unknowns), system.C @ solve(system), strict=True))
    forward = BIPOLAR["saturation_current"] * np.expm1(0.66 / (BIPOLAR["ideality"] * VT))
    assert charge["at_base"] == pytest.approx(
        300e-12 * forward + 2e-12 * 0.66 + 1e-12 * (0.66 - 2.0), rel=1e-9
    )
    assert charge["at_emitter"] == pytest.approx(-300e-12 * forward - 2e-12 * 0.66, rel=1e-9)
    assert charge["at_collector"] == pytest.approx(1e-12 * (2.0 - 0.66), rel=1e-9)


def test_a_pnp_stores_charge_of_the_other_sign():
    fields = {**BIPOLAR, "transit_time": 300e-12}
    charges = []
    for device, sign in (("bipolar_npn", 1.0), ("bipolar_pnp", -1.0)):
        system = assemble(
            probed(device, {"collector": 2.0 * sign, "base": 0.66 * sign, "emitter": 0.0}, **fields)
        )
        charges.append(
            dict(zip((name for _, name in system.unknowns), system.C @ solve(system), strict=True))
        )
    assert charges[1]["at_base"] == pytest.approx(-charges[0]["at_base"], rel=1e-12)


def test_differential_pair_shares_its_tail_current_by_a_hyperbolic_tangent():
    # IEE tanh(v / 2 V_T); v = V_T gives 0.462117157260009759 IEE (closed form)
    fields = {"saturation_current": 1e-15, "forward_gain": 1e9, "reverse_gain": 1e9}
    low, high = -0.9, 0.0
    for _ in range(200):
        tail = 0.5 * (low + high)
        pair = [
            currents("bipolar_npn", {"collector": 5.0, "base": base, "emitter": tail}, **fields)["collector"]
            for base in (VT, 0.0)
        ]
        low, high = (tail, high) if sum(pair) > 1e-3 else (low, tail)
    assert (pair[0] - pair[1]) / sum(pair) == pytest.approx(0.462117157260009759, rel=1e-9)


MOS = {"threshold": 0.55, "transconductance": 4e-4, "slope_factor": 1.35}
# drain, gate, source, body: off, weak inversion, saturation, linear region, raised source, drain below source
CHANNELS = [
    (3.0, 0.0, 0.0, 0.0),
    (3.0, 0.4, 0.0, 0.0),
    (3.0, 1.5, 0.0, 0.0),
    (0.1, 1.8, 0.0, 0.0),
    (2.0, 2.5, 0.7, 0.0),
    (-0.3, 1.2, 0.4, -1.0),
]


def _charge_sheet(drain, gate, source, body, modulation, ambient=25.0):
    """i_D; C. C. Enz, F. Krummenacher, E. A. Vittoz, Analog Integrated Circuits and Signal Processing 8 (1995), from memory."""
    n, thermal = mpmath.mpf(MOS["slope_factor"]), K_OVER_E * (mpmath.mpf(ambient) + mpmath.mpf("273.15"))
    pinch = (mpmath.mpf(gate - body) - mpmath.mpf(MOS["threshold"])) / n
    specific = 2 * n * mpmath.mpf(MOS["transconductance"]) * thermal**2

    def sheet(channel):
        return mpmath.log1p(mpmath.exp((pinch - mpmath.mpf(channel - body)) / thermal / 2)) ** 2

    drop = mpmath.mpf(drain - source)
    return specific * (sheet(source) * (1 + modulation * drop) - sheet(drain) * (1 - modulation * drop))


@pytest.mark.parametrize("modulation", [None, 0.08])
@pytest.mark.parametrize("ambient", [-20.0, 25.0, 85.0])
@pytest.mark.parametrize("channel", CHANNELS)
def test_mosfet_current_follows_the_charge_sheet(channel, ambient, modulation):
    fields = MOS if modulation is None else {**MOS, "channel_modulation": modulation}
    found = currents(
        "mosfet_n", dict(zip(("drain", "gate", "source", "body"), channel, strict=True)), ambient, **fields
    )
    wanted = float(_charge_sheet(*channel, modulation or 0.0, ambient))
    assert found["drain"] == pytest.approx(wanted, rel=1e-9, abs=1e-22)
    assert found["source"] == -found["drain"]
    assert found["gate"] == 0.0
    assert found["body"] == 0.0


@pytest.mark.parametrize("device", ["mosfet_n", "mosfet_p"])
@pytest.mark.parametrize("channel", CHANNELS)
def test_exchanging_drain_and_source_turns_the_current_round_exactly(device, channel):
    drain, gate, source, body = channel
    fields = {**MOS, "channel_modulation": 0.08}
    one = currents(device, {"drain": drain, "gate": gate, "source": source, "body": body}, **fields)
    other = currents(device, {"drain": source, "gate": gate, "source": drain, "body": body}, **fields)
    assert one["drain"] == -other["drain"]


@pytest.mark.parametrize("channel", CHANNELS)
def test_a_p_channel_is_an_n_channel_with_every_sign_turned(channel):
    volts = dict(zip(("drain", "gate", "source", "body"), channel, strict=True))
    one = currents("mosfet_n", volts, **MOS, channel_modulation=0.05)
    other = currents(
        "mosfet_p", {pin: -value for pin, value in volts.items()}, **MOS, channel_modulation=0.05
    )
    assert other == {pin: -value for pin, value in one.items()}


def test_weak_inversion_falls_a_decade_per_slope_factor_times_60_millivolts():
    # common practice: n V_T ln 10 a decade; V_T ln 10 is 59.16 mV at 25 degC
    volts = [
        {"drain": 1.0, "gate": gate, "source": 0.0, "body": 0.0}
        for gate in (-0.2, -0.2 - MOS["slope_factor"] * VT * np.log(10.0))
    ]
    upper, lower = (currents("mosfet_n", at, **MOS)["drain"] for at in volts)
    assert upper / lower == pytest.approx(10.0, rel=1e-4)


def test_strong_inversion_with_unit_slope_factor_is_the_square_law():
    at = {"drain": 3.0, "gate": 2.2, "source": 0.0, "body": 0.0}
    found = currents("mosfet_n", at, threshold=1.0, transconductance=2e-4, slope_factor=1.0)["drain"]
    assert found == pytest.approx(1e-4 * 1.2**2, rel=1e-9)


def test_gate_capacitances_stand_between_gate_and_channel_ends():
    volts = {"drain": 2.0, "gate": 1.5, "source": 0.25, "body": 0.0}
    system = assemble(probed("mosfet_n", volts, gate_source_capacitance=5e-15, gate_drain_capacitance=2e-15))
    charge = dict(zip((name for _, name in system.unknowns), system.C @ solve(system), strict=True))
    assert charge["at_gate"] == pytest.approx(5e-15 * 1.25 + 2e-15 * -0.5, rel=1e-12)
    assert charge["at_drain"] == pytest.approx(2e-15 * 0.5, rel=1e-12)
    assert charge["at_body"] == 0.0
