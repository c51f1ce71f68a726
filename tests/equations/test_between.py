"""Nets that only elements without gain touch lie between the nets that hold them; nothing is claimed of others."""

import numpy as np
import pytest

import loopsim
from loopsim.analyses import points
from loopsim.analyses.points import all_points
from loopsim.equations.assemble import assemble
from loopsim.equations.between import GROUND, held_between

KINDS = """kind low_side = mosfet_n(threshold = 0.5 V, transconductance = 0.4 mA/V^2, slope_factor = 1.3)
kind high_side = mosfet_p(threshold = 0.5 V, transconductance = 0.2 mA/V^2, slope_factor = 1.3)
"""


def system_of(lines):
    return assemble(loopsim.parse('circuit some "Some parts"\n' + KINDS + lines))


def sets(system):
    """{net: names of what holds it} for every net that is bounded."""
    names = {GROUND: "gnd"} | {j: name for j, (_, name) in enumerate(system.unknowns)}
    return {
        names[int(i)]: {names[int(j)] for j in one.others} for one in held_between(system) for i in one.members
    }


def test_a_divider_lies_between_its_ends():
    system = system_of("gnd -> supply: 5 V -> top\ntop -- upper: 3.3 kohm -- mid -- lower: 4.7 kohm -- gnd\n")
    assert sets(system) == {"mid": {"gnd", "top"}}
    (one,) = held_between(system)
    low, high = one.bounds(np.full(system.n, 5.0), np.full(system.n, 5.0))
    assert low <= 0.0 <= low + 0.01
    assert high - 0.01 <= 5.0 <= high


def test_an_inverter_lies_between_its_rails_whatever_its_gate():
    system = system_of(
        "gnd -> supply: 1.8 V -> vdd\nup: high_side(drain = y, gate = x, source = vdd, body = vdd)\n"
        "down: low_side(drain = y, gate = x, source = gnd, body = gnd)\n"
        "up2: high_side(drain = x, gate = y, source = vdd, body = vdd)\n"
        "down2: low_side(drain = x, gate = y, source = gnd, body = gnd)\n"
    )
    assert sets(system) == {"x": {"gnd", "vdd"}, "y": {"gnd", "vdd"}}


def test_nothing_is_claimed_of_a_net_with_a_current_source_or_of_an_output():
    system = system_of(
        "gnd -> pump: 1 mA -> a\na -- r1: 1 kohm -- b -- r2: 2.2 kohm -- gnd\n"
        "gnd -> upper: 9 V -> vpos\nvneg -> lower: 9 V -> gnd\nb -- r3: 12 kohm -- out\n"
        "u: opamp(plus = b, minus = gnd, out = out, high = vpos, low = vneg, gain = 100000)\n"
    )
    found = sets(system)
    assert set(found) <= {"b"}
    assert found["b"] >= {"a", "out"}


def test_a_net_driven_by_a_formula_is_not_bounded():
    """A transconductance feeds the net: it can leave its neighbours."""
    system = system_of(
        "gnd -> supply: 1 V -> top\ntop -- r1: 1 kohm -- a -- r2: 10 kohm -- b -- r3: 10 kohm -- gnd\n"
        "gnd -> push: 10 mS * a -> b\n"
    )
    assert "b" not in sets(system)


def random_lines(random):
    """Resistors, diodes and transistors between nets and two supplies, a resistor from each net to a rail."""
    nets = [f"n{i}" for i in range(int(random.integers(2, 5)))]
    ends = [*nets, "vcc", "gnd"]
    lines = ["gnd -> supply: 3 V -> vcc"]
    for i, net in enumerate(nets):
        lines.append(f"{net} -- tie{i}: {random.integers(1, 100)}.{random.integers(0, 99)} kohm -- {random.choice(['vcc', 'gnd'])}")
    for i in range(int(random.integers(2, 6))):
        a, b, c = random.choice(ends, 3, replace=False)
        match int(random.integers(0, 5)):
            case 0:
                lines.append(f"{a} -- r{i}: {random.integers(1, 30)} kohm -- {b}")
            case 1:
                lines.append(f"{a} -> d{i}: diode(saturation_current = 10 fA) -> {b}")
            case 2:
                lines.append(f"q{i}: bipolar_npn(collector = {a}, base = {b}, emitter = {c}, saturation_current = 10 fA)")
            case 3:
                lines.append(f"q{i}: bipolar_pnp(collector = {a}, base = {b}, emitter = {c}, saturation_current = 10 fA)")
            case _:
                lines.append(f"m{i}: low_side(drain = {a}, gate = {b}, source = {c}, body = gnd)")
    return "\n".join(lines) + "\n"


@pytest.mark.parametrize("block", [0, *(pytest.param(k, marks=pytest.mark.slow) for k in range(1, 20))])
def test_points_found_without_the_bounds_lie_within_them(block, monkeypatch):
    """The same list with and without; and the bounds say something."""
    random = np.random.default_rng(100 + block)
    bounded = 0
    for _ in range(8):
        system = system_of(random_lines(random))
        found = all_points(system, 1e3, max_boxes=400)
        with monkeypatch.context() as without:
            without.setattr(points, "held_between", lambda system: ())
            plain = all_points(system, 1e3, max_boxes=400)
        if found.complete and plain.complete:
            assert len(found.x) == len(plain.x)
        for x in plain.x:
            for one in held_between(system):
                bounded += len(one.members)
                low, high = one.bounds(x, x)
                assert np.all((low <= x[one.members]) & (x[one.members] <= high))
                # the widening aside: a point may stand on the bound only to rounding
                assert np.all(x[one.members] >= low + 0.999e-3 - 1e-9)
                assert np.all(x[one.members] <= high - 0.999e-3 + 1e-9)
    assert bounded
