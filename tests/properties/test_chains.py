"""Chains of tunnel diodes with 10 mS between neighbours: few points however long the chain, and the work must not explode
with it.

Curve as in two_tunnel_diodes (coefficients from memory), in mA and V; every node is fed from 35 V through 13.3 kohm. The
count is proved independently by shooting: the voltage t of the first node fixes all others, and the balance of the last is
one function of t, whose zeros are isolated by ball arithmetic (python-flint) with its derivative. By passivity every voltage
lies between 0 and 35 V.
"""

import numpy as np
import pytest
from array_systems import Kind, Row, solve, system_of, unit
from flint import arb

SUPPLY, FEED, LINK = 35.0, 1 / 13.3, 10.0  # V, mS, mS
CURVE = (11.8, -10.5, 2.5)
COUNTS = {4: 3, 6: 5, 8: 5}


def chain(n):
    G = FEED * np.eye(n)
    for k in range(n - 1):
        step = unit(n, k) - unit(n, k + 1)
        G += LINK * np.outer(step, step)
    return system_of(G, np.full(n, FEED * SUPPLY), [Row(Kind.POLYNOMIAL, unit(n, j), unit(n, j), CURVE) for j in range(n)])


def ball(low, high):
    return arb((low + high) / 2, (high - low) / 2 * (1 + 1e-12))


def taken(v):
    """(current, conductance) of one node's diode and feed at v."""
    a, b, c = (arb(x) for x in CURVE)
    feed = arb(FEED)
    return ((c * v + b) * v + a) * v + feed * (v - SUPPLY), (3 * c * v + 2 * b) * v + a + feed


def shoot(t, n):
    """(balance of the last node, its derivative) as balls over the ball t, or None where a voltage leaves 0 .. 35 V for all of t.

    Every voltage is enclosed twice, directly and by its value in the middle plus its derivative times the distance (mean
    value form).
    """
    middle = arb(t.mid())
    away = t - middle
    before, v, d_before, dv = None, t, arb(0), arb(1)
    m_before, m = None, middle
    for k in range(n):
        if v < -1e-9 or v > SUPPLY + 1e-9:
            return None
        (current, slope), (m_current, _) = taken(v), taken(m)
        total = current + (LINK * (v - before) if k else 0)
        m_total = m_current + (LINK * (m - m_before) if k else 0)
        d_total = slope * dv + (LINK * (dv - d_before) if k else 0)
        if k == n - 1:
            return total.intersection(m_total + d_total * away), d_total
        before, d_before, m_before = v, dv, m
        v, dv, m = v + total / LINK, dv + d_total / LINK, m + m_total / LINK
        v = v.intersection(m + dv * away)
    raise AssertionError


def count_by_shooting(n):
    """Number of t in 0 .. 35 V with a balance of zero: intervals are dropped, settled by the sign at their ends, or halved."""
    found, stack = 0, [(0.0, SUPPLY)]
    while stack:
        low, high = stack.pop()
        answer = shoot(ball(low, high), n)
        if answer is None or not answer[0].overlaps(arb(0)):
            continue
        if not answer[1].overlaps(arb(0)):
            ends = [shoot(arb(end), n) for end in (low, high)]
            if all(e is not None and not e[0].overlaps(arb(0)) for e in ends):
                found += (ends[0][0] > 0) != (ends[1][0] > 0)
                continue
        middle = 0.5 * (low + high) + 1e-4 * (high - low)
        assert low < middle < high, "a double zero"
        stack += [(low, middle), (middle, high)]
    return found


@pytest.mark.parametrize("n", COUNTS)
def test_count_is_proved_and_agrees_with_shooting(n):
    found = solve(chain(n))
    assert found.complete
    assert len(found.x) == count_by_shooting(n) == COUNTS[n]


def test_boxes_do_not_explode_with_the_length():
    boxes = [solve(chain(n)).boxes for n in (4, 8, 12)]
    assert boxes[2] <= 6 * boxes[0]


@pytest.mark.parametrize("box", [40.0, 1e6])
def test_the_start_box_does_not_matter(box):
    found = solve(chain(6), box)
    assert found.complete
    assert len(found.x) == COUNTS[6]
