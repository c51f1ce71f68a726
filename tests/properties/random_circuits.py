"""Seeded random circuits of resistors, junctions and transistors, built as data.

Supplies are Norton sources (a current and a resistor), so that a nodal matrix without gains has a positive determinant: the
sign to which determinants are compared.
"""

from __future__ import annotations

import numpy as np

import loopsim
from loopsim.build import CircuitBuilder
from loopsim.circuit import Circuit


def _supply(build: CircuitBuilder, name: str, net: str, volts: float, ohms: float) -> None:
    build.chain("gnd", f"{name}_source", net, device="current_source", current=volts / ohms)
    build.chain(net, f"{name}_resistor", "gnd", device="resistor", resistance=ohms)


def two_transistors(seed: int) -> Circuit:
    """A pair of transistors that feed each other: the only structure of two transistors that can have several operating points
    (R. O. Nielsen, A. N. Willson, Proc. IEEE 68 (1980) 196-208, from memory), with random resistors round it."""
    random = np.random.default_rng([31, seed])
    build = CircuitBuilder(f"pair_{seed}")
    complementary = random.random() < 0.3
    kinds = ("bipolar_npn", "bipolar_pnp") if complementary else ("bipolar_npn", "bipolar_npn")
    volts = random.uniform(2.0, 12.0)
    emitters = ("e1", "e1") if random.random() < 0.5 and not complementary else ("e1", "e2")
    for k, (kind, emitter) in enumerate(zip(kinds, emitters, strict=True), start=1):
        fields = {
            "saturation_current": 10 ** random.uniform(-16, -13),
            "forward_gain": 10 ** random.uniform(1, 2.5),
            "reverse_gain": 10 ** random.uniform(-0.5, 1),
        }
        build.part(f"q{k}", kind, {"collector": f"c{k}", "base": f"b{k}", "emitter": emitter}, **fields)
    for k in (1, 2):
        if complementary and k == 2:
            build.chain("c2", "r_c2", "gnd", device="resistor", resistance=10 ** random.uniform(2, 4))
            _supply(build, "e2", "e2", volts, 10 ** random.uniform(1, 3))
        else:
            _supply(build, f"c{k}", f"c{k}", volts, 10 ** random.uniform(2.5, 4))
        build.chain(f"c{k}", f"r_b{3 - k}", f"b{3 - k}", device="resistor", resistance=10 ** random.uniform(2, 4.5))
        if random.random() < 0.7:
            build.chain(f"b{k}", f"r_g{k}", "gnd", device="resistor", resistance=10 ** random.uniform(3, 6))
    for emitter in sorted(set(emitters)):
        build.chain(emitter, f"r_{emitter}", "gnd", device="resistor", resistance=10 ** random.uniform(0, 3))
    return build.circuit()


def one_transistor(seed: int) -> Circuit:
    """One transistor between random resistors: never more than one operating point (same source, corollary)."""
    random = np.random.default_rng([32, seed])
    build = CircuitBuilder(f"single_{seed}")
    kind = str(random.choice(["bipolar_npn", "bipolar_pnp"]))
    build.part(
        "q1", kind, {"collector": "c", "base": "b", "emitter": "e"},
        saturation_current=10 ** random.uniform(-16, -13),
        forward_gain=10 ** random.uniform(1, 2.5),
        reverse_gain=10 ** random.uniform(-0.5, 1),
    )
    for net in ("c", "b", "e"):
        _supply(build, net, net, random.uniform(-9.0, 9.0), 10 ** random.uniform(2, 5))
    for a, b in (("c", "b"), ("b", "e"), ("c", "e")):
        if random.random() < 0.6:
            build.chain(a, f"r_{a}{b}", b, device="resistor", resistance=10 ** random.uniform(2, 5))
    return build.circuit()


def junction_network(seed: int) -> Circuit:
    """Voltage sources, resistors and junctions: every two-terminal part increasing, so exactly one operating point (R. J.
    Duffin 1947, from memory), and every net between the extreme source voltages."""
    random = np.random.default_rng([33, seed])
    build = CircuitBuilder(f"network_{seed}")
    nets = [f"n{k}" for k in range(int(random.integers(2, 6)))]
    for k in range(int(random.integers(1, 3))):
        build.chain("gnd", f"source{k}", f"s{k}", device="voltage_source", voltage=random.uniform(-8.0, 8.0))
        build.chain(f"s{k}", f"feed{k}", nets[k % len(nets)], device="resistor", resistance=10 ** random.uniform(1, 5))
    for k, net in enumerate(nets):
        build.chain(net, f"r{k}", str(random.choice(["gnd", *[n for n in nets if n != net]])), device="resistor",
                    resistance=10 ** random.uniform(1, 6))
        build.chain(net, f"g{k}", "gnd", device="resistor", resistance=10 ** random.uniform(4, 7))
    for k in range(int(random.integers(1, 6))):
        a, b = (str(x) for x in random.choice(["gnd", *nets], 2, replace=False))
        saturation, ideality = 10 ** random.uniform(-15, -8), random.uniform(1, 2)
        build.chain(a, f"d{k}", b, device="diode", saturation_current=saturation, ideality=ideality)
    return build.circuit()


def any_network(seed: int) -> Circuit:
    """Two to six nets with every device that has a law of its own, values over many decades, supplies up to 30 V: nothing is
    known about the count, so it is what a proof and a search are compared on."""
    random = np.random.default_rng([34, seed])
    build = CircuitBuilder(f"mixture_{seed}")
    nets = [f"n{k}" for k in range(int(random.integers(2, 6)))]
    build.chain("gnd", "rail", "vcc", device="voltage_source", voltage=random.uniform(1.0, 30.0))
    places = ["gnd", "vcc", *nets]

    def somewhere(*pins: str) -> dict[str, str]:
        chosen = random.choice(places, len(pins), replace=len(pins) > len(places))
        return dict(zip(pins, (str(net) for net in chosen), strict=True))

    for k, net in enumerate(nets):
        build.chain(net, f"g{k}", str(random.choice(["gnd", "vcc"])), device="resistor", resistance=10 ** random.uniform(1, 7))
    for k in range(int(random.integers(1, 4))):
        a, b = (str(x) for x in random.choice(places, 2, replace=False))
        build.chain(a, f"r{k}", b, device="resistor", resistance=10 ** random.uniform(0, 7))
    for k in range(int(random.integers(2, 7))):
        what = int(random.integers(0, 6))
        if what == 0:
            a, b = (str(x) for x in random.choice(places, 2, replace=False))
            build.chain(a, f"d{k}", b, device="diode", saturation_current=10 ** random.uniform(-18, -6),
                        series_resistance=10 ** random.uniform(-1, 2), breakdown_voltage=random.uniform(2, 20))
        elif what == 1:
            fields = {"early_voltage": random.uniform(10, 200)} if random.random() < 0.5 else {}
            build.part(f"q{k}", str(random.choice(["bipolar_npn", "bipolar_pnp"])), somewhere("collector", "base", "emitter"),
                       saturation_current=10 ** random.uniform(-17, -12), forward_gain=10 ** random.uniform(1, 3), **fields)
        elif what == 2:
            fields = {"channel_modulation": random.uniform(0.01, 0.2)} if random.random() < 0.5 else {}
            build.part(f"m{k}", str(random.choice(["mosfet_n", "mosfet_p"])), somewhere("drain", "gate", "source", "body"),
                       threshold=random.uniform(0.3, 2), transconductance=10 ** random.uniform(-4, 0), **fields)
        elif what == 3:
            pins = somewhere("plus", "minus") | {"out": str(random.choice(nets)), "high": "vcc", "low": "gnd"}
            build.part(f"u{k}", "opamp", pins, gain=10 ** random.uniform(2, 6), output_resistance=10 ** random.uniform(1, 3),
                       headroom=random.uniform(0, 0.3), input_offset=random.normal() * 1e-3)
        elif what == 4:
            a, b = (str(x) for x in random.choice(places, 2, replace=False))
            scale = 10 ** random.uniform(-4, -1)
            form = build.curve(f"curve{k}", "polynomial", [scale * c for c in (11.8, -10.5, 2.5)])
            build.chain(a, f"c{k}", b, device="curve_conductance", curve=form)
        else:
            a, b = (str(x) for x in random.choice(places, 2, replace=False))
            build.chain(a, f"p{k}", b, device="constant_power_load", power=10 ** random.uniform(-3, 1),
                        dropout_voltage=random.uniform(0.2, 2))
    return build.circuit()


def formula_network(seed: int) -> Circuit:
    """The same with what `any_network` leaves out: comparators of both outputs, piecewise linear curves, sources that a formula with
    limit, tanh, atan or a curve controls. As text, since formulas read best so."""
    random = np.random.default_rng([36, seed])
    nets = [f"n{k}" for k in range(int(random.integers(2, 6)))]
    lines = [
        f'circuit mixture_{seed} "Mixture"',
        "curve corners = points(-1 V: -2 mA, -0.2 V: -1.5 mA, 0 V: 0 A, 0.3 V: 2 mA, 0.7 V: 0.4 mA, 2 V: 5 mA)",
        "curve hump = points(-5 V: -3 V, -1 V: 2 V, 0 V: 0 V, 1 V: -2 V, 5 V: 3 V)",
        f"gnd -> rail: {random.uniform(1, 24):.4g} V -> vcc",
    ]

    def value(low: float, high: float) -> str:
        return f"{10 ** random.uniform(low, high):.4g}"

    def signed(low: float, high: float) -> str:
        return f"{random.choice([-1.0, 1.0]) * 10 ** random.uniform(low, high):.4g}"

    def two() -> list[str]:
        return [str(net) for net in random.choice(["gnd", "vcc", *nets], 2, replace=False)]

    for k, net in enumerate(nets):
        lines.append(f"{net} -- g{k}: {value(1, 7)} ohm -- {random.choice(['gnd', 'vcc'])}")
    for k in range(int(random.integers(2, 6))):
        (a, b), (c, d) = two(), two()
        pins = f"plus = {a}, minus = {b}, out = {random.choice(nets)}, high = vcc, low = gnd, gain = {value(2, 6)}"
        lines.append(
            (
                f"u{k}: comparator({pins}, output_resistance = {value(0, 3)} ohm)",
                f"u{k}: comparator({pins}, output = open_collector)",
                f"{a} -> c{k}: corners -> {b}",
                f"{a} -> f{k}: {value(-5, -1)} S * limit({c} - {d}, -{value(-1, 1)} V, {value(-1, 1)} V) -> {b}",
                f"{a} -> f{k}: {signed(-4, -1)} A * tanh(({c} - {value(-1, 0.5)} * {d}) / {value(-2, 1)} V) -> {b}",
                f"{a} -> f{k}: {signed(-4, -1)} A * atan({c} / {value(-2, 1)} V) -> {b}",
                f"{a} -> f{k}: {signed(-4, -2)} S * hump({c} - {d}) -> {b}",
                f"kind junction{k} = diode(saturation_current = {value(-16, -8)} A)\n{a} -> d{k}: junction{k} -> {b}",
            )[int(random.integers(8))]
        )
    return loopsim.parse("\n".join(lines) + "\n")
