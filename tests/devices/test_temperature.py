"""Temperature laws: thermal voltage, saturation current, resistance, threshold, mobility."""

import mpmath
import numpy as np
import pytest
from probing import currents

from loopsim.devices.thermal import THERMAL, saturation_factor, thermal_voltage

# k T / e, CODATA 2018, exact by definition, read from scipy.constants 1.17.1
VOLTS = {
    0.0: 0.0235382458055496,
    20.0: 0.0252617124579786,
    25.0: 0.0256925791210858,
    27.0: 0.0258649257863288,
}


@pytest.mark.parametrize(("ambient", "volts"), VOLTS.items())
def test_the_thermal_voltage_is_kt_over_e(ambient, volts):
    assert thermal_voltage(ambient) == pytest.approx(volts, rel=2e-15)
    assert pytest.approx(8.61733326214517744e-5, rel=2e-16) == THERMAL


def test_field_values_hold_at_25_degrees_exactly():
    assert saturation_factor(25.0, 1.12, 3.0, 1.3) == 1.0


def test_saturation_current_follows_its_activation_energy():
    # n_i^2 ~ T^3 exp(-E_g / k T) (from memory), here with 60 digits
    hot, cold = mpmath.mpf("358.15"), mpmath.mpf("298.15")
    e_over_k = 1 / mpmath.mpf("8.61733326214517744e-5")
    wanted = (hot / cold) ** 3 * mpmath.exp(mpmath.mpf("1.12") * e_over_k * (1 / cold - 1 / hot))
    assert saturation_factor(85.0, 1.12, 3.0, 1.0) == pytest.approx(float(wanted), rel=1e-12)


def test_a_silicon_diode_loses_about_two_millivolts_a_kelvin():
    # common practice: -2 mV/K at constant current for a silicon diode near 0.65 V
    def drop(ambient):
        low, high = 0.2, 1.0
        for _ in range(60):
            middle = 0.5 * (low + high)
            flows = currents("diode", {"from": middle, "to": 0.0}, ambient, saturation_current=1e-14)["from"]
            low, high = (middle, high) if flows < 1e-3 else (low, middle)
        return middle

    assert (drop(35.0) - drop(25.0)) / 10.0 == pytest.approx(-1.9e-3, abs=0.2e-3)


def test_a_resistor_drifts_only_if_its_coefficient_is_given():
    at = {"from": 2.0, "to": 0.0}
    assert currents("resistor", at, 75.0, resistance=1e3, temperature_coefficient=100e-6)[
        "from"
    ] == pytest.approx(2.0 / (1e3 * 1.005), rel=1e-14)
    assert (
        currents("resistor", at, 75.0, resistance=1e3)["from"]
        == currents("resistor", at, 25.0, resistance=1e3)["from"]
    )


def test_threshold_and_mobility_drift_only_if_given():
    at = {"drain": 3.0, "gate": 2.0, "source": 0.0, "body": 0.0}
    # strong inversion, slope factor 1: K / 2 (v_GS - V_th)^2
    fields = {"threshold": 0.7, "transconductance": 1e-3, "slope_factor": 1.0}
    drifting = currents("mosfet_n", at, 125.0, **fields, threshold_drift=-1e-3, mobility_exponent=1.5)[
        "drain"
    ]
    assert drifting == pytest.approx(0.5e-3 * (398.15 / 298.15) ** -1.5 * (2.0 - 0.6) ** 2, rel=1e-9)
    assert currents("mosfet_n", at, 125.0, **fields)["drain"] == pytest.approx(0.5e-3 * 1.3**2, rel=1e-9)


def test_a_batch_of_temperatures_is_a_row_of_single_ones():
    degrees = np.array([-40.0, 25.0, 85.0])
    together = saturation_factor(degrees, 1.12, 3.0, 1.7)
    assert np.array_equal(together, [saturation_factor(float(t), 1.12, 3.0, 1.7) for t in degrees])
