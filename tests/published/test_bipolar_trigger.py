"""Emitter-coupled trigger of two bipolar transistors: three operating points, full Ebers-Moll equations.

Lj. Trajkovic, R. C. Melville, S.-C. Fang (1990/91); A. Dyes and others, Simple implementations of homotopy algorithms
for finding dc
solutions of nonlinear circuits, ISCAS 1999. Parameter values from memory, topology reconstructed; the count of three
supports both.
"""

import itertools

import mpmath
import numpy as np
import pytest
from array_systems import Kind, Row, assert_points, determinant_sign, solve, system_of

NETS = ("e", "c1", "c2", "b2", "b1")
# e, c1, c2, b2, b1 recomputed to 40 digits, rounded; growing modes with equal capacitors from each net to ground
POINTS = np.array(
    [
        [1.17609574105776534, 5.49256274732809628, 1.26882608316058147, 2.0053100345790445, 1.97316936467512191],
        [1.13842898771610747, 2.62649495854352897, 3.57840013833134614, 1.95826584937717601, 1.95102174629584937],
        [0.668223462299142325, 0.739851160982595759, 9.99999999999868946, 0.732525901963845132, 1.4904654104528596],
    ]
)
GROWING = (0, 1, 0)
SIGNS = (1, -1, 1)

VCC, R1, R2, R3, R4, RC1, RC2, RE = 10.0, 10e3, 5e3, 1.25e3, 1e6, 1.5e3, 1e3, 100.0
SATURATION, ALPHA_F, ALPHA_R, SLOPE = 1e-16, 0.99, 0.5, 38.78


def linear_part():
    """(G, s): conductances between the nets and to the supply."""
    e, c1, c2, b2, b1 = range(5)
    G, s = np.zeros((5, 5)), np.zeros(5)
    for a, b, ohms in ((c1, b2, R1), (b2, None, R4), (b1, None, R3), (e, None, RE)):
        G[a, a] += 1 / ohms
        if b is not None:
            G[b, b] += 1 / ohms
            G[a, b] -= 1 / ohms
            G[b, a] -= 1 / ohms
    for a, ohms in ((c1, RC1), (c2, RC2), (b1, R2)):
        G[a, a] += 1 / ohms
        s[a] += VCC / ohms
    return G, s


def junctions():
    """Rows for the two exponentials of each transistor, Ebers-Moll with Is = alpha_f I_es = alpha_r I_cs."""
    e, c1, c2, b2, b1 = range(5)
    rows = []
    for c, b in ((c1, b1), (c2, b2)):
        for other, alpha in ((e, ALPHA_F), (c, ALPHA_R)):
            line, column = np.zeros(5), np.zeros(5)
            line[b], line[other] = SLOPE, -SLOPE
            column[b] += SATURATION / alpha * (1 - alpha)
            far = c if other == e else e
            column[far] += SATURATION  # alpha * (Is / alpha), out of the far terminal
            column[other] -= SATURATION / alpha
            rows.append(Row(Kind.EXPONENTIAL, line, column))
    return rows


def trigger():
    G, s = linear_part()
    return system_of(G, s, junctions(), C=1e-12 * np.eye(5))


def reference(start):
    """The nearest solution in 40-digit arithmetic."""
    with mpmath.workdps(40):
        mp = mpmath.mpf
        Is, af, ar, n = mp("1e-16"), mp("0.99"), mp("0.5"), mp("38.78")

        def balance(e, c1, c2, b2, b1):
            def device(c, b):
                fe, fc = Is / af * mpmath.expm1(n * (b - e)), Is / ar * mpmath.expm1(n * (b - c))
                return af * fe - fc, (1 - af) * fe + (1 - ar) * fc, fe - ar * fc

            ic1, ib1, ie1 = device(c1, b1)
            ic2, ib2, ie2 = device(c2, b2)
            return [
                e / 100 - ie1 - ie2,
                (c1 - 10) / 1500 + (c1 - b2) / 10000 + ic1,
                (c2 - 10) / 1000 + ic2,
                (b2 - c1) / 10000 + b2 / 1000000 + ib2,
                (b1 - 10) / 5000 + b1 / 1250 + ib1,
            ]

        return [float(a) for a in mpmath.findroot(balance, [mp(float(a)) for a in start])]


@pytest.mark.parametrize("box", [20.0, 1e3, 1e6])
def test_all_three_points_are_proved(box):
    found = solve(trigger(), box)
    assert found.complete
    assert_points(found.x, np.array([reference(p) for p in POINTS]), 1e-10)
    assert_points(found.x, POINTS, 1e-10)


def test_determinant_sign_names_the_middle_point():
    assert tuple(determinant_sign(trigger(), POINTS)) == SIGNS


def test_only_the_middle_point_grows():
    from loopsim.analyses.stability import judge

    verdicts = judge(trigger(), POINTS)
    assert [np.count_nonzero(v.eigenvalues.real > 0) for v in verdicts] == list(GROWING)
    assert [v.stable for v in verdicts] == [True, False, True]


def test_uniqueness_criterion_fails_as_it_must():
    """I. W. Sandberg, A. N. Willson, SIAM J. Appl. Math. 19 (1970), from memory: one point for every source and every
    increasing
    junction law if and only if A = T^-1 G has no negative principal minor. Here the one of both base-collector
    voltages is -0.0278 mS^2."""
    G, _ = linear_part()
    rows = junctions()  # be1, bc1, be2, bc2
    W = np.array([row.line for row in rows]) / SLOPE
    T = np.array([[1, -ALPHA_R], [-ALPHA_F, 1]])  # junction currents to terminal currents
    terminals = np.kron(np.eye(2), T)
    # ports: junction voltages v = W x; with net currents W^T (T i) the four-port seen by the junctions is (W G^-1 W^T)^-1
    port = np.linalg.inv(W @ np.linalg.inv(G) @ W.T)
    A = np.linalg.inv(terminals) @ port
    minors = {
        chosen: np.linalg.det(A[np.ix_(chosen, chosen)])
        for size in (1, 2, 3, 4)
        for chosen in itertools.combinations(range(4), size)
    }
    assert min(minors.values()) < 0
    assert minors[1, 3] == pytest.approx(-0.0278e-6, rel=5e-3)


CIRCUIT = """
circuit bipolar_trigger "Emitter-coupled trigger"
# ideality chosen so that 1 / (ideality * thermal voltage at 25 degC) is 38.78 per volt
kind npn = bipolar_npn(saturation_current = 0.1 fA, forward_gain = 99, reverse_gain = 1, ideality = {ideality!r})
gnd -> battery: 10 V -> vcc
vcc -- rc1: 1.5 kohm -- c1 -- r1: 10 kohm -- b2 -- r4: 1 Mohm -- gnd
vcc -- rc2: 1 kohm -- c2
vcc -- r2: 5 kohm -- b1 -- r3: 1.25 kohm -- gnd
e -- re: 100 ohm -- gnd
q1: npn(collector = c1, base = b1, emitter = e)
q2: npn(collector = c2, base = b2, emitter = e)
"""


def test_the_same_as_a_circuit():
    import loopsim

    thermal_voltage = 1.380649e-23 / 1.602176634e-19 * 298.15  # CODATA 2018, exact
    points = loopsim.parse(CIRCUIT.format(ideality=1 / (38.78 * thermal_voltage))).states()
    assert points.complete
    found = np.array([[p[net] for net in NETS] for p in points])
    assert_points(found, POINTS, 1e-9)
    assert [p.stable for p in sorted(points, key=lambda p: -p["e"])] == [True, False, True]
    middle = sorted(points, key=lambda p: -p["e"])[1]
    assert middle.verdict == "unstable, whatever the strays"
