"""Circuits that move, built by program, for the tests of transient and cycle."""

from loopsim.build import CircuitBuilder, Given
from loopsim.circuit import Circuit


def charging(supply: Given = 1.0) -> Circuit:
    """1 kohm and 1 uF on a supply: a time constant of 1 ms."""
    b = CircuitBuilder("charging")
    b.chain("gnd", "cell", "feed", device="voltage_source", voltage=supply)
    b.chain("feed", "r", "out", device="resistor", resistance=1e3)
    b.chain("out", "c", "gnd", device="capacitor", capacitance=1e-6)
    return b.circuit()


def series_tank(resistance: float, supply: Given = 1.0) -> Circuit:
    """Resistor, 1 H and 1 F in series; without the resistor where it is 0."""
    b = CircuitBuilder("series_tank")
    b.chain("gnd", "cell", "feed", device="voltage_source", voltage=supply)
    middle = "feed"
    if resistance > 0.0:
        middle = "middle"
        b.chain("feed", "r", "middle", device="resistor", resistance=resistance)
    b.chain(middle, "l", "out", device="inductor", inductance=1.0)
    b.chain("out", "c", "gnd", device="capacitor", capacitance=1.0)
    return b.circuit()


def free_tank() -> Circuit:
    """1 H across 1 F: an energy that nothing takes away."""
    b = CircuitBuilder("free_tank")
    b.chain("out", "l", "gnd", device="inductor", inductance=1.0)
    b.chain("out", "c", "gnd", device="capacitor", capacitance=1.0)
    return b.circuit()


def blinker(slew_rate: float = 13e6, upper: float = 10e3) -> Circuit:
    """Relaxation oscillator of an empty cistern's lamp: 10 kohm and 100 nF around a comparator with hysteresis."""
    b = CircuitBuilder("cistern_blinker")
    b.chain("gnd", "pos", "vpos", device="voltage_source", voltage=6.0)
    b.chain("vneg", "neg", "gnd", device="voltage_source", voltage=6.0)
    b.chain("out", "r_time", "minus", device="resistor", resistance=10e3)
    b.chain("minus", "c_time", "gnd", device="capacitor", capacitance=100e-9)
    b.chain("out", "r_2", "plus", device="resistor", resistance=upper)
    b.chain("plus", "r_1", "gnd", device="resistor", resistance=10e3)
    b.part(
        "u1", "opamp", {"plus": "plus", "minus": "minus", "out": "out", "high": "vpos", "low": "vneg"},
        gain=1e5, gain_bandwidth=3e6, slew_rate=slew_rate, headroom=0.02, output_resistance=60.0,
    )  # fmt: skip
    return b.circuit()


def negative_conductance(mu: float) -> Circuit:
    """van der Pol's circuit: 1 F, 1 H and a conductance i = -mu v + mu v^3 / 3, so that time is that of the equation."""
    b = CircuitBuilder("tuned")
    b.chain("out", "c", "gnd", device="capacitor", capacitance=1.0)
    b.chain("out", "l", "gnd", device="inductor", inductance=1.0)
    curve = b.curve("falling", "polynomial", [-mu, 0.0, mu / 3.0])
    b.chain("out", "d", "gnd", device="curve_conductance", curve=curve)
    return b.circuit()


def latch(load: float = 1e-9) -> Circuit:
    """Two saturating amplifiers crosswise, each with 1 kohm and a capacitor: three states, the middle one unstable."""
    from loopsim.build import net, operation

    b = CircuitBuilder("hive_latch")
    for here, there in (("flag", "inverse"), ("inverse", "flag")):
        drive = operation("*", 2e-3, operation("tanh", operation("*", 2.0, net(there))))
        b.chain("gnd", f"pull_{here}", here, device="controlled_current_source", formula=operation("negative", drive))
        b.chain(here, f"r_{here}", "gnd", device="resistor", resistance=1e3)
        b.chain(here, f"c_{here}", "gnd", device="capacitor", capacitance=load)
    return b.circuit()


def trigger(supply: Given) -> Circuit:
    """Non-inverting comparator with hysteresis of a float gauge: thresholds at half its rails."""
    b = CircuitBuilder("float_trigger")
    b.chain("gnd", "pos", "vpos", device="voltage_source", voltage=5.0)
    b.chain("vneg", "neg", "gnd", device="voltage_source", voltage=5.0)
    b.chain("gnd", "probe", "sense", device="voltage_source", voltage=supply)
    b.chain("sense", "r_in", "plus", device="resistor", resistance=10e3)
    b.chain("plus", "r_fb", "out", device="resistor", resistance=20e3)
    b.chain("minus", "r_ref", "gnd", device="resistor", resistance=10e3)
    b.part(
        "u1", "opamp", {"plus": "plus", "minus": "minus", "out": "out", "high": "vpos", "low": "vneg"},
        gain=1e5, gain_bandwidth=1e6, slew_rate=1e6, headroom=0.0, output_resistance=60.0,
    )  # fmt: skip
    return b.circuit()


def follower(supply: Given) -> Circuit:
    """Amplifier of gain 1, slew rate 0.5 V/us."""
    b = CircuitBuilder("gauge_buffer")
    b.chain("gnd", "pos", "vpos", device="voltage_source", voltage=9.0)
    b.chain("vneg", "neg", "gnd", device="voltage_source", voltage=9.0)
    b.chain("gnd", "probe", "sense", device="voltage_source", voltage=supply)
    b.part(
        "u1", "opamp", {"plus": "sense", "minus": "out", "out": "out", "high": "vpos", "low": "vneg"},
        gain=1e5, gain_bandwidth=1e6, slew_rate=0.5e6, headroom=0.1, output_resistance=60.0,
    )  # fmt: skip
    return b.circuit()
