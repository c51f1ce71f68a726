"""Circuits with requirements put to them, for the tests of how they are judged."""

from functools import cache
from pathlib import Path

import loopsim

PUMP = """
circuit pump "Level switch"
kind rail_amp = opamp(gain = 110 dB, gain_bandwidth = 2 MHz, slew_rate = 3 V/us, headroom = 20 mV)
let supply = 9 V +/- 1 %
let level = 4.5 V in 0 V .. 9 V
gnd -> battery: supply -> vcc
gnd -> probe: level -> sense
vcc -- r_top: 22 kohm +/- 1 % -- mid -- r_bottom: 22 kohm +/- 1 % -- gnd
sense -- r_in: 10 kohm -- plus -- r_fb: 47 kohm -- out
u1: rail_amp(plus = plus, minus = mid, out = out, high = vcc, low = gnd)
"""

DIVIDER = """
circuit divider "A divider: everything about it is known in closed form"
let supply = 10 V +/- 10 % in 0 V .. 20 V
gnd -> source: supply -> top -- r_top: 1 kohm +/- 1 % -- mid -- r_bottom: 1 kohm +/- 1 % -- gnd
mid -- store: 1 uF +/- 20 % -- gnd
"""


def asked(text, *lines, **options):
    """Outcomes of the `expect` lines put to a circuit."""
    return loopsim.parse("\n".join([text, *lines, ""])).verify(**options)


@cache
def one(text, line, **options):
    """The outcome of one `expect` line."""
    (outcome,) = asked(text, line, **options)
    return outcome


def library(name):
    (path,) = Path("circuits").rglob(f"{name}.loop")
    return loopsim.load(path)
