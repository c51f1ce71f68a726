"""How temperature moves device values. Every value of a field holds at 25 degC."""

from __future__ import annotations

import numpy as np

from loopsim.devices.fields import Scalar

KELVIN = 273.15  # K at 0 degC
REFERENCE = 25.0  # degC at which the values of fields hold
THERMAL = 1.380649e-23 / 1.602176634e-19  # V/K, k/e, both exact by definition of the SI (2019)
AMBIENT_LOW, AMBIENT_HIGH = -200.0, 500.0  # degC; beyond, no law of these devices means anything


def kelvin(ambient: Scalar) -> Scalar:
    """Absolute temperature [K] of `ambient` [degC]."""
    return ambient + KELVIN


def thermal_voltage(ambient: Scalar) -> Scalar:
    """k T / e [V] at `ambient` [degC]."""
    return THERMAL * kelvin(ambient)


def temperature_ratio(ambient: Scalar) -> Scalar:
    """T / T(25 degC)."""
    return kelvin(ambient) / kelvin(REFERENCE)


def saturation_factor(ambient: Scalar, bandgap_voltage: Scalar, exponent: Scalar, ideality: Scalar) -> Scalar:
    """I_S(T) / I_S(25 degC) of a junction: ((T/T0)^exponent exp((E_g/k) (1/T0 - 1/T)))^(1/ideality).

    The law of a diffusion current with n_i^2 ~ T^3 exp(-E_g / k T), shared out by the ideality (from memory).
    bandgap_voltage: E_g / e [V].
    """
    arrhenius = bandgap_voltage / THERMAL * (1.0 / kelvin(REFERENCE) - 1.0 / kelvin(ambient))
    return temperature_ratio(ambient) ** (exponent / ideality) * np.exp(arrhenius / ideality)
