"""The diode against closed forms."""

import mpmath
import numpy as np
import pytest
from probing import currents, probed, solve

from loopsim.build import CircuitBuilder
from loopsim.devices.thermal import thermal_voltage
from loopsim.equations.assemble import assemble

mpmath.mp.dps = 40
VT = thermal_voltage(25.0)
# T. C. Banwell, A. Jayakumar, Electronics Letters 36 (2000) 291-292 (from memory), Lambert W form; recomputed to 30 digits:
# source, resistance, saturation current, ideality times thermal voltage, current, diode voltage
BANWELL = [
    (5, 1000, 1e-14, 0.0258519997864355, 0.004307456372506470046, 0.69254362749352995395),
    (1, 1000, 1e-15, 0.025, 0.00033645662320162543043, 0.66354337679837456957),
    (0.5, 100, 1e-12, 0.025852, 0.00014386340925499529455, 0.48561365907450047054),
    (5, 1e6, 1e-14, 0.025852, 4.4849915186511689286e-6, 0.51500848134883107137),
    (10, 100, 1e-9, 0.05, 0.090837707475528723351, 0.9162292524471276649),
    (-5, 1000, 1e-14, 0.025852, -1.0e-14, -4.99999999999),
]


@pytest.mark.parametrize("ambient", [-20.0, 25.0, 60.0])
@pytest.mark.parametrize("volts", [-3.0, -0.01, 0.0, 0.01, 0.35, 0.62, 0.75])
def test_current_follows_the_exponential_law(volts, ambient):
    found = currents(
        "diode",
        {"from": volts, "to": 0.0},
        ambient,
        saturation_current=2e-14,
        ideality=1.4,
        saturation_exponent=0.0,
    )
    ratio = 1 / mpmath.mpf("298.15") - 1 / (mpmath.mpf(ambient) + mpmath.mpf("273.15"))
    k_over_e = mpmath.mpf("8.61733326214517744e-5")
    saturation = mpmath.mpf("2e-14") * mpmath.exp(mpmath.mpf("1.12") / (mpmath.mpf("1.4") * k_over_e) * ratio)
    thermal = k_over_e * (mpmath.mpf(ambient) + mpmath.mpf("273.15"))
    wanted = saturation * mpmath.expm1(mpmath.mpf(volts) / (mpmath.mpf("1.4") * thermal))
    assert found["from"] == pytest.approx(float(wanted), rel=1e-11, abs=1e-40)
    assert found["to"] == -found["from"]


@pytest.mark.parametrize(("source", "ohms", "saturation", "scale", "amperes", "volts"), BANWELL)
def test_a_diode_behind_a_resistor_meets_the_lambert_w_form(source, ohms, saturation, scale, amperes, volts):
    bench = CircuitBuilder("lambert")
    bench.chain("gnd", "supply", "a", device="voltage_source", voltage=source)
    bench.chain("a", "r", "d", device="resistor", resistance=ohms)
    bench.chain("d", "d1", "gnd", device="diode", saturation_current=saturation, ideality=scale / VT)
    system = assemble(bench.circuit())
    x = solve(system)
    assert x[system.index["net", "d"]] == pytest.approx(volts, rel=1e-12)
    assert -x[system.index["current", "supply"]] == pytest.approx(-amperes, rel=1e-9)


@pytest.mark.parametrize(("source", "ohms", "saturation", "scale", "amperes", "volts"), BANWELL[:5])
def test_series_resistance_is_a_resistor_in_front(source, ohms, saturation, scale, amperes, volts):
    fields = {"saturation_current": saturation, "ideality": scale / VT, "series_resistance": ohms}
    assert currents("diode", {"from": source, "to": 0.0}, **fields)["from"] == pytest.approx(
        amperes, rel=1e-9
    )


def test_breakdown_carries_its_current_at_its_voltage_and_none_at_rest():
    fields = {"saturation_current": 1e-14, "breakdown_voltage": 5.1, "breakdown_current": 2e-3}
    at_breakdown = currents("diode", {"from": -5.1, "to": 0.0}, **fields)["from"]
    assert at_breakdown == pytest.approx(-2e-3, rel=1e-10)
    one_decade_more = currents("diode", {"from": -5.1 - VT * np.log(10.0), "to": 0.0}, **fields)["from"]
    assert one_decade_more == pytest.approx(-2e-2, rel=1e-10)
    assert currents("diode", {"from": 0.0, "to": 0.0}, **fields)["from"] == pytest.approx(0.0, abs=1e-18)
    # far from breakdown the forward law is left alone
    plain = currents("diode", {"from": 0.6, "to": 0.0}, saturation_current=1e-14)["from"]
    assert currents("diode", {"from": 0.6, "to": 0.0}, **fields)["from"] == pytest.approx(plain, rel=1e-10)


def test_effects_that_are_not_given_leave_no_trace():
    plain = assemble(probed("diode", {"from": 0.5, "to": 0.0}))
    assert plain.m == 1
    assert plain.n == 4
    assert not np.any(plain.C)


def test_stored_charge_is_transit_time_times_forward_current():
    tau, capacitance = 4e-9, 3e-12
    system = assemble(
        probed("diode", {"from": 0.6, "to": 0.0}, transit_time=tau, junction_capacitance=capacitance)
    )
    x = solve(system)
    d = system.index["internal", "x.diffusion_current"]
    forward = 1e-14 * np.expm1(0.6 / VT)
    assert x[d] == pytest.approx(forward, rel=1e-12)
    a, b = system.index["net", "at_from"], system.index["net", "at_to"]
    # charge on the anode: C x in its row, and the opposite on the cathode
    charge = system.C @ x
    assert charge[a] == pytest.approx(tau * forward + capacitance * 0.6, rel=1e-12)
    assert charge[b] == -charge[a]
