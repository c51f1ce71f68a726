"""Rewrites of a circuit that leave its physics alone: the same operating points must come out, in voltages, counts and
verdicts."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from loopsim.circuit import Circuit, Curve, Part
from loopsim.expressions import CurrentRef, Expression, LetRef, NetRef, Number, Operation

# device: power of the impedance scale of each field: resistance grows with it, current and capacitance fall
IMPEDANCE_POWERS = {
    "resistor": {"resistance": 1},
    "conductance": {"conductance": -1},
    "capacitor": {"capacitance": -1},
    "inductor": {"inductance": 1},
    "current_source": {"current": -1},
    "diode": {
        "saturation_current": -1, "series_resistance": 1, "junction_capacitance": -1, "breakdown_current": -1,
    },
    "bipolar_npn": {"saturation_current": -1, "base_emitter_capacitance": -1, "base_collector_capacitance": -1},
    "mosfet_n": {"transconductance": -1, "gate_source_capacitance": -1, "gate_drain_capacitance": -1},
    "opamp": {"output_resistance": 1, "input_bias": -1, "input_resistance": 1, "input_capacitance": -1},
    "comparator": {"sink_resistance": 1, "output_resistance": 1, "input_bias": -1, "input_resistance": 1},
    "voltage_source": {},
    "constant_power_load": {"power": -1},
}  # fmt: skip
IMPEDANCE_POWERS["bipolar_pnp"] = IMPEDANCE_POWERS["bipolar_npn"]
IMPEDANCE_POWERS["mosfet_p"] = IMPEDANCE_POWERS["mosfet_n"]

# defaults that carry a scale and so must be written out before they can be scaled
WRITTEN_OUT = {
    "bipolar_npn": {"saturation_current": 1e-14},
    "bipolar_pnp": {"saturation_current": 1e-14},
    "diode": {"saturation_current": 1e-14, "breakdown_current": 1e-3},
    "mosfet_n": {"transconductance": 1e-3},
    "mosfet_p": {"transconductance": 1e-3},
    "comparator": {},
}

MIRRORED = {
    "bipolar_npn": "bipolar_pnp", "bipolar_pnp": "bipolar_npn", "mosfet_n": "mosfet_p", "mosfet_p": "mosfet_n",
}  # fmt: skip

FORMULAS = (Number, LetRef, NetRef, CurrentRef, Operation)


def times(tree: Expression, factor: float) -> Expression:
    return Operation("*", (tree, Number(factor)))


def renamed(circuit: Circuit) -> Circuit:
    """Every net and every part gets another name; lets keep theirs, so that settings still fit."""

    def net(name: str) -> str:
        return name if name == "gnd" else f"z_{name[::-1]}_n"

    def part_name(name: str) -> str:
        return f"a_{name[::-1]}_p"

    def tree(t):
        match t:
            case NetRef(name):
                return NetRef(net(name))
            case CurrentRef(name):
                return CurrentRef(part_name(name))
            case Operation(name, arguments, curve):
                return Operation(name, tuple(tree(a) for a in arguments), curve)
        return t

    parts = []
    for p in circuit.parts:
        fields = {k: tree(v) if isinstance(v, FORMULAS) else v for k, v in p.fields.items()}
        pins = {pin: net(n) for pin, n in p.pins.items()}
        parts.append(replace(p, name=part_name(p.name), pins=pins, fields=fields))
    return replace(circuit, nets=tuple(net(n) for n in circuit.nets), parts=tuple(parts), requirements=())


def back(name: str) -> str:
    """What `renamed` calls a net."""
    return f"z_{name[::-1]}_n"


def reordered(circuit: Circuit, seed: int = 3) -> Circuit:
    """Parts and nets in another order."""
    random = np.random.default_rng(seed)
    parts = tuple(circuit.parts[int(i)] for i in random.permutation(len(circuit.parts)))
    nets = tuple(circuit.nets[int(i)] for i in random.permutation(len(circuit.nets)))
    return replace(circuit, parts=parts, nets=nets)


def split_resistors(circuit: Circuit) -> Circuit:
    """Each resistor becomes, in turn, two of half the value in series or two of twice the value side by side."""
    parts: list[Part] = []
    nets = list(circuit.nets)
    for k, p in enumerate(circuit.parts):
        if p.device != "resistor":
            parts.append(p)
        elif k % 2:
            middle = f"{p.name}_middle"
            nets.append(middle)
            half = {"resistance": times(p.fields["resistance"], 0.5)}
            parts.append(replace(p, pins={"from": p.pins["from"], "to": middle}, fields=half))
            parts.append(replace(p, name=f"{p.name}_second", pins={"from": middle, "to": p.pins["to"]}, fields=half))
        else:
            double = {"resistance": times(p.fields["resistance"], 2.0)}
            parts += [replace(p, fields=double), replace(p, name=f"{p.name}_second", fields=double)]
    return replace(circuit, parts=tuple(parts), nets=tuple(nets))


def mirrored(circuit: Circuit) -> Circuit:
    """Every voltage and current changes its sign: sources reversed, n for p, rails exchanged, two-terminal parts turned round."""
    parts = []
    for p in circuit.parts:
        pins = dict(p.pins)
        if "from" in pins:
            pins = {"from": pins["to"], "to": pins["from"]}
        if p.device in ("opamp", "comparator"):
            pins["high"], pins["low"] = pins["low"], pins["high"]
        fields = dict(p.fields)
        if "headroom_high" in fields or "headroom_low" in fields:
            high, low = fields.pop("headroom_high", None), fields.pop("headroom_low", None)
            fields |= {k: v for k, v in (("headroom_high", low), ("headroom_low", high)) if v is not None}
        for name in ("input_offset", "input_bias"):
            if name in fields:
                fields[name] = times(fields[name], -1.0)
        parts.append(replace(p, device=MIRRORED.get(p.device, p.device), pins=pins, fields=fields))
    return replace(circuit, parts=tuple(parts))


def _scaled_curve(curve: Curve, factor: float) -> Curve:
    if curve.form == "polynomial":
        return replace(curve, values=tuple(times(v, factor) for v in curve.values))
    return replace(curve, values=tuple(v if k % 2 == 0 else times(v, factor) for k, v in enumerate(curve.values)))


def scaled(circuit: Circuit, power: int) -> Circuit:
    """Every impedance times 2^power: all voltages and all time constants stay."""
    factor = 2.0**power
    parts = []
    for p in circuit.parts:
        fields = {k: Number(v) for k, v in WRITTEN_OUT.get(p.device, {}).items()} | dict(p.fields)
        if p.device == "curve_conductance":
            fields["curve"] = _scaled_curve(fields["curve"], 1 / factor)
        else:
            powers = IMPEDANCE_POWERS[p.device]
            fields = {k: times(v, factor ** powers[k]) if k in powers else v for k, v in fields.items()}
        parts.append(replace(p, fields=fields))
    curves = {name: _scaled_curve(c, 1 / factor) for name, c in circuit.curves.items()}
    return replace(circuit, parts=tuple(parts), curves=curves)
