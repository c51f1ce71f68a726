"""Every verdict word against eigenvalues in closed form (textbook roots of quadratics; the sign rule is Green and Willson 1992)."""

import re

import numpy as np
import pytest
from array_systems import system_of

import loopsim
from loopsim.analyses import stability

PICO = 1e-12  # F, the stray that is assumed on each net


def verdict_of(J, C=None):
    """On the origin of C x' = -J x; J in S, C in F, a row a balance of currents."""
    J = np.asarray(J, dtype=float)
    return stability.judge(system_of(J, np.zeros(len(J)), [], C=C), np.zeros((1, len(J))))[0]


def only(text):
    points = loopsim.parse('circuit probe "Probe"\n' + text).states()
    assert points.complete
    assert len(points) == 1
    return points[0]


def assert_roots(found, *expected, rel=1e-9):
    wanted = np.sort_complex(np.array(expected, dtype=complex))
    assert np.allclose(np.sort_complex(found), wanted, rtol=rel, atol=0.0), f"{found} instead of {wanted}"


def strays_of(note):
    """{net: F} of a note that says with which strays a verdict turns."""
    return {net: float(size) * PICO for size, net in re.findall(r"([\d.e+-]+) pF on (\w+)", note)}


def test_stable_with_the_time_constant_of_a_resistor_and_a_capacitor():
    point = only("gnd -> source: 5 V -> top -- r1: 1 kohm -- out -- c1: 10 nF -- gnd\n")
    assert (point.verdict, point.stable) == ("stable", True)
    assert_roots(point.eigenvalues, -1e5)
    assert point.growth_rate == pytest.approx(-1e5, rel=1e-9)
    assert point.damping is None


@pytest.mark.parametrize("ohms", [200.0, 2000.0, 20000.0])
def test_stable_with_the_damping_of_a_parallel_tank(ohms):
    """s^2 + s / (R C) + 1 / (L C) = 0: damping sqrt(L / C) / (2 R); real roots where it exceeds one."""
    point = only(f"gnd -> feed: 1 mA -> out -- r1: {ohms} ohm -- gnd\nout -- c1: 1 nF -- gnd\nout -- l1: 1 mH -- gnd\n")
    assert (point.verdict, point.stable) == ("stable", True)
    assert_roots(point.eigenvalues, *np.roots([1.0, 1 / (ohms * 1e-9), 1e12]))
    damping = 1000.0 / (2 * ohms)
    assert point.damping == (None if damping > 1 else pytest.approx(damping, rel=1e-9))


def test_unstable_with_these_dynamics_names_frequency_and_nets():
    """C v' = g v - i, L i' = v: s = g / (2 C) +- i sqrt(1 / (L C) - (g / (2 C))^2), and det J > 0 whatever g is."""
    point = only("tank -- c1: 1 nF -- gnd\ntank -- l1: 1 mH -- gnd\ntank -> g1: -0.5 mS * tank -> gnd\n")
    assert (point.verdict, point.stable, point.verdict_full.any_strays) == ("unstable with these dynamics", False, False)
    rate, turn = 0.25e6, np.sqrt(1e12 - 0.25e6**2)
    assert_roots(point.eigenvalues, rate + 1j * turn, rate - 1j * turn)
    assert point.growth_rate == pytest.approx(rate, rel=1e-9)
    assert point.verdict_full.frequency == pytest.approx(turn / (2 * np.pi), rel=1e-9)
    assert point.damping == pytest.approx(-rate / 1e6, rel=1e-9)
    assert point.verdict_full.swings == ("tank",)


def test_two_growing_real_modes_are_unstable_with_these_dynamics():
    """An even number of them leaves the sign of the determinant right."""
    verdict = verdict_of([[-1e-3, 1e-4], [1e-4, -1e-3]], C=np.eye(2) * 1e-9)
    assert (verdict.text, verdict.stable, verdict.any_strays) == ("unstable with these dynamics", False, False)
    assert_roots(verdict.eigenvalues, 1.1e6, 0.9e6)
    assert verdict.frequency is None


def test_unstable_whatever_the_strays_with_the_rate_of_its_own_capacitor():
    point = only("out -- c1: 1 nF -- gnd\nout -> g1: -2 mS * out -> gnd\nout -- r1: 1 kohm -- gnd\n")
    assert (point.verdict, point.stable, point.verdict_full.any_strays) == ("unstable, whatever the strays", False, True)
    assert_roots(point.eigenvalues, 1e6)


def test_unstable_whatever_the_strays_without_any_dynamics():
    """The rate is then that of the assumed stray, and the note says so."""
    point = only("out -> g1: -2 mS * out -> gnd\nout -- r1: 1 kohm -- gnd\n")
    assert (point.verdict, point.stable, point.verdict_full.any_strays) == ("unstable, whatever the strays", False, True)
    assert point.growth_rate == pytest.approx(1e-3 / PICO, rel=1e-9)
    assert "1 pF" in point.verdict_full.note


def test_a_loop_whose_resistance_is_negative_is_unstable_whatever_its_inductance():
    """The dual: L i' = -(1 kohm - 2 kohm) i."""
    point = only("mid -- l1: 1 mH -- gnd\nmid -> fall: -2 V/mA * current(l1) -> end -- r1: 1 kohm -- gnd\n")
    assert (point.verdict, point.stable) == ("unstable, whatever the strays", False)
    assert point.growth_rate == pytest.approx(1e3 / 1e-3, rel=1e-9)


def test_stable_for_all_strays_tried():
    """A divider: the conductances of its net over the assumed stray."""
    point = only("gnd -> source: 5 V -> top -- r1: 1 kohm -- out -- r2: 1 kohm -- gnd\n")
    assert (point.verdict, point.stable, point.verdict_full.any_strays) == ("stable for all strays tried", True, True)
    assert point.growth_rate == pytest.approx(-2e-3 / PICO, rel=1e-9)
    assert "assumed 1 pF" in point.verdict_full.note
    assert "no dynamics given" in point.verdict_full.note


def test_unstable_for_all_strays_tried():
    """Two growing modes for every pair of capacitances, since J is negative definite; no wrong sign."""
    verdict = verdict_of([[-1e-3, 1e-4], [1e-4, -1e-3]])
    assert (verdict.text, verdict.stable) == ("unstable for all strays tried", False)
    assert verdict.growth_rate == pytest.approx(1.1e-3 / PICO, rel=1e-9)


def test_depends_on_strays_and_says_on_which():
    """J = [[-1, 2], [-2, 3]] mS has det J > 0 and decays exactly where 3 C1 > C2 (trace of C^-1 J)."""
    verdict = verdict_of([[-1e-3, 2e-3], [-2e-3, 3e-3]])
    assert (verdict.text, verdict.stable, verdict.any_strays) == ("depends on strays", None, False)
    strays = strays_of(verdict.note.partition("grows with ")[2])
    assert strays["x2"] > 3 * strays["x1"]


def test_depends_on_strays_where_equal_ones_grow():
    verdict = verdict_of([[-3e-3, 4e-3], [-4e-3, 2e-3]])
    assert (verdict.text, verdict.stable) == ("depends on strays", None)
    strays = strays_of(verdict.note.partition("decays with ")[2])
    assert 2 * strays["x1"] > 3 * strays["x2"]


@pytest.mark.parametrize(("own", "turns"), [(1e-9, False), (0.01e-12, True)])
def test_stable_with_its_dynamics_tells_where_strays_on_bare_nets_would_turn_it(own, turns):
    """The same J with C1 declared: x2 follows at once, -1 + 2 * 2 / 3 = 1/3 mS; a stray above 3 C1 on x2 makes it grow."""
    verdict = verdict_of([[-1e-3, 2e-3], [-2e-3, 3e-3]], C=np.diag([own, 0.0]))
    assert (verdict.text, verdict.stable, verdict.any_strays) == ("stable", True, not turns)
    assert_roots(verdict.eigenvalues, -1e-3 / 3 / own)
    if turns:
        assert strays_of(verdict.note)["x2"] > 3 * own
    else:
        assert verdict.note == ""


def test_undecided_where_the_real_part_is_nil():
    """Without loss: a tank with its dynamics, a gyrator with any strays (its trace is nil for each)."""
    tank = only("gnd -> feed: 1 mA -> tank -- c1: 1 nF -- gnd\ntank -- l1: 1 mH -- gnd\n")
    gyrator = verdict_of([[0.0, 1e-3], [-1e-3, 0.0]])
    for found in (tank.verdict, gyrator.text):
        assert found == "undecided"
    assert tank.stable is None
    assert gyrator.stable is None
    assert "rounding error of zero" in tank.verdict_full.note


@pytest.mark.parametrize(("loss", "word"), [(0.5e-3, "stable for all strays tried"), (-0.5e-3, "unstable for all strays tried")])
def test_a_net_whose_own_balance_does_not_hold_it_still_moves(loss, word):
    """A gyrator with loss or gain at one side: C1 C2 s^2 + C1 g s + k^2 = 0 has the sign of g for every C1, C2."""
    verdict = verdict_of([[0.0, 1e-3], [-1e-3, loss]])
    assert verdict.text == word
    assert_roots(verdict.eigenvalues, *np.roots([PICO**2, PICO * loss, 1e-6]))


def test_a_net_held_by_a_source_cannot_move():
    point = only("gnd -> source: 5 V -> top -- r1: 1 kohm -- gnd\n")
    assert (point.verdict, point.stable) == ("stable", True)
    assert "held by a source" in point.verdict_full.note


@pytest.mark.parametrize("unit", [1e-12, 1e-6, 1.0, 1e6])
def test_a_verdict_does_not_hang_on_the_unit_of_current(unit):
    """C and J scaled together: the same roots, the same words."""
    J = np.array([[-1e-3, 1e-3], [-1e-3, 0.5e-3]]) * unit
    verdict = verdict_of(J, C=np.eye(2) * 1e-9 * unit)
    assert verdict.text == "unstable with these dynamics"
    assert_roots(verdict.eigenvalues, *np.roots([1.0, -0.5e6, 0.5e12]))


def test_random_networks_agree_with_the_matrix_itself():
    """C^-1 J by NumPy's eigenvalues for well-conditioned C: 200 seeded matrices, each word where the signs put it."""
    random = np.random.default_rng(11)
    seen = set()
    for _ in range(200):
        n = int(random.integers(1, 6))
        J = random.normal(size=(n, n)) * 1e-3 + np.eye(n) * random.choice([0.0, 1e-3])
        C = np.diag(10 ** random.uniform(-9, -7, n))
        verdict = verdict_of(J, C=C)
        roots = -np.linalg.eigvals(np.linalg.solve(C, J))
        assert_roots(verdict.eigenvalues, *roots, rel=1e-6)
        wrong = np.linalg.det(J) < 0
        word = (
            "unstable, whatever the strays" if wrong else "unstable with these dynamics" if np.max(roots.real) > 0 else "stable"
        )
        assert verdict.text == word
        seen.add(word)
    assert len(seen) == 3
