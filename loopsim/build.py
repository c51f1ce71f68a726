"""Circuits from a program instead of text, from the same checked data.

from loopsim.build import CircuitBuilder, let, net

pump = CircuitBuilder("cistern")
pump.let("level", 4.5, unit="V", low=0.0, high=9.0)
pump.chain("gnd", "probe", "sense", device="voltage_source", voltage=let("level"))
pump.chain("sense", "r_in", "plus", device="resistor", resistance=10e3)
...
circuit = pump.circuit()
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TypeAlias

from loopsim.circuit import Circuit, Coupling, Curve, FieldValue, Parameter, Part, Tolerance, Waveform
from loopsim.devices.catalogue import DEVICES
from loopsim.errors import CircuitError
from loopsim.expressions import CurrentRef, Expression, LetRef, NetRef, Number, Operation

Given: TypeAlias = float | Expression | Curve | Waveform | str


def let(name: str) -> LetRef:
    """The value of a named quantity, for use in a field or a formula."""
    return LetRef(name)


def net(name: str) -> NetRef:
    """The voltage of a net to gnd, for use in the formula of a controlled source."""
    return NetRef(name)


def current(part: str) -> CurrentRef:
    """The current through a part along its chain, for use in the formula of a controlled source."""
    return CurrentRef(part)


def operation(name: str, *arguments: float | Expression, curve: str = "") -> Operation:
    """An operator or function of the language (`+ - * / ^ negative tanh atan limit curve ...`) applied to formulas or numbers."""
    return Operation(name, tuple(_formula(argument) for argument in arguments), curve)


def waveform(form: str, **fields: float | Expression) -> Waveform:
    """`sine`, `square` or `ramp` with its fields; the field `from` is written `from_`."""
    return Waveform(form, {name.rstrip("_"): _formula(value) for name, value in fields.items()})


def points(pairs: Sequence[tuple[float | Expression, float | Expression]]) -> Waveform:
    """Straight lines through (time, value) pairs."""
    return Waveform("points", {}, tuple((_formula(time), _formula(value)) for time, value in pairs))


def _formula(value: float | Expression) -> Expression:
    return Number(float(value)) if isinstance(value, float | int) else value


def _field(value: Given) -> FieldValue:
    return Number(float(value)) if isinstance(value, float | int) else value


class CircuitBuilder:
    """Collects lets, curves, parts and couplings; `circuit()` gives the frozen circuit. Nets come into being where they are
    named."""

    def __init__(self, name: str, title: str = "") -> None:
        self._name, self._title = name, title
        self._parameters: dict[str, Parameter] = {}
        self._curves: dict[str, Curve] = {}
        self._parts: list[Part] = []
        self._couplings: list[Coupling] = []
        self._nets: dict[str, None] = {}

    def let(
        self,
        name: str,
        value: float | Expression,
        *,
        unit: str = "",
        low: float | Expression | None = None,
        high: float | Expression | None = None,
        tolerance: Tolerance | None = None,
    ) -> LetRef:
        """A named quantity [SI], its traced range and its tolerance; the answer stands for it in fields and formulas."""
        ends = [None if end is None else _formula(end) for end in (low, high)]
        self._parameters[name] = Parameter(name, _formula(value), unit, ends[0], ends[1], tolerance)
        return LetRef(name)

    def curve(self, name: str, form: str, values: Sequence[float | Expression]) -> Curve:
        """A static characteristic: `polynomial` (a1, a2, ...) or `points` (x0, y0, x1, y1, ...)."""
        self._curves[name] = Curve(name, form, tuple(_formula(value) for value in values))
        return self._curves[name]

    def chain(self, start: str, name: str, end: str, *, device: str, **fields: Given) -> None:
        """A part with two pins from the net `start` to the net `end`."""
        self._add(name, device, {"from": start, "to": end}, fields)

    def part(self, name: str, device: str, pins: Mapping[str, str], **fields: Given) -> None:
        """A part with named pins; pins: pin to net."""
        self._add(name, device, pins, fields)

    def couple(self, first: str, second: str, coefficient: float | Expression) -> None:
        """Mutual inductance of two inductors."""
        self._couplings.append(Coupling(first, second, _formula(coefficient)))

    def _add(self, name: str, device: str, pins: Mapping[str, str], fields: Mapping[str, Given]) -> None:
        if device not in DEVICES:
            raise CircuitError(
                "unknown-device", f"there is no device `{device}`", hint=f"there are {', '.join(DEVICES)}"
            )
        # nets in the order of the device's pins, so that the order of a mapping does not matter
        for pin in (*DEVICES[device].pins, *pins):
            if pin in pins and pins[pin] != "gnd":
                self._nets.setdefault(pins[pin])
        self._parts.append(
            Part(name, device, dict(pins), {key: _field(value) for key, value in fields.items()})
        )

    def circuit(self) -> Circuit:
        """What was collected so far."""
        parameters = {"ambient": Parameter("ambient", Number(25.0), "degC"), **self._parameters}
        return Circuit(
            name=self._name,
            title=self._title,
            nets=tuple(self._nets),
            parameters=parameters,
            curves=dict(self._curves),
            parts=tuple(self._parts),
            couplings=tuple(self._couplings),
        )
