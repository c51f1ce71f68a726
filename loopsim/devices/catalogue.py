"""Every device by its name in the language, with its fields."""

from __future__ import annotations

from collections.abc import Mapping
from typing import ClassVar, Protocol

from loopsim.devices.amplifiers import Comparator, OpAmp
from loopsim.devices.contribution import Contribution
from loopsim.devices.fields import FieldSpec, Scalar, specs_of
from loopsim.devices.junctions import Diode
from loopsim.devices.loads import ConstantPowerLoad, Switch
from loopsim.devices.passive import Capacitor, Conductance, CurveConductance, Inductor, Resistor
from loopsim.devices.sources import (
    ControlledCurrentSource,
    ControlledVoltageSource,
    CurrentSource,
    VoltageSource,
)
from loopsim.devices.transistors import BipolarNpn, BipolarPnp, MosfetN, MosfetP
from loopsim.devices.waveforms import waveform_specs


class Device(Protocol):
    """What every class of the catalogue has: its pins, whether `->` joins it in a chain, and what it adds to the equations."""

    pins: ClassVar[tuple[str, ...]]
    polarised: ClassVar[bool]

    def contribution(self, ambient: Scalar) -> Contribution:
        """At the temperature `ambient` [degC]; every field a float or an array of shape (batch,)."""


DEVICES: Mapping[str, type[Device]] = {
    "resistor": Resistor,
    "conductance": Conductance,
    "capacitor": Capacitor,
    "inductor": Inductor,
    "voltage_source": VoltageSource,
    "current_source": CurrentSource,
    "controlled_voltage_source": ControlledVoltageSource,
    "controlled_current_source": ControlledCurrentSource,
    "curve_conductance": CurveConductance,
    "diode": Diode,
    "switch": Switch,
    "constant_power_load": ConstantPowerLoad,
    "opamp": OpAmp,
    "comparator": Comparator,
    "bipolar_npn": BipolarNpn,
    "bipolar_pnp": BipolarPnp,
    "mosfet_n": MosfetN,
    "mosfet_p": MosfetP,
}


def field_specs(device: str) -> dict[str, FieldSpec]:
    """The fields of a device by its name, in the order in which the reference page lists them. KeyError for an unknown device."""
    return specs_of(DEVICES[device])


def pins(device: str) -> tuple[str, ...]:
    """The pins of a device, `from` and `to` for what stands in a chain."""
    return DEVICES[device].pins


def is_polarised(device: str) -> bool:
    """Whether a chain joins it with an arrow."""
    return DEVICES[device].polarised


__all__ = ["DEVICES", "Device", "FieldSpec", "field_specs", "is_polarised", "pins", "waveform_specs"]
