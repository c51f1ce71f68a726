"""Theorems about operating points, as properties of seeded random circuits. Each source was known from memory or by its
abstract."""

import itertools
import math

import numpy as np
import pytest
from random_circuits import junction_network, one_transistor, two_transistors

from loopsim.analyses.states import states
from loopsim.equations.assemble import assemble, pin_currents

PAIRS = range(40)


@pytest.fixture(scope="module")
def pairs():
    """(circuit, its states, its system) of each random pair of transistors."""
    return [(circuit, states(circuit), assemble(circuit)) for circuit in map(two_transistors, PAIRS)]


def signs(found, system):
    return [np.linalg.slogdet(system.jacobian(point.x))[0] for point in found]


def test_the_set_is_worth_looking_at(pairs):
    counts = [len(found) for _, found, _ in pairs]
    assert all(found.complete for _, found, _ in pairs)
    assert counts.count(1) >= 5
    assert sum(count >= 3 for count in counts) >= 5


def test_the_number_of_points_is_odd_and_the_signs_sum_to_one(pairs):
    """Degree theory: L. O. Chua, N. N. Wang, Int. J. Circuit Theory Appl. 5 (1977); A. N. Willson, IEEE Trans. CAS 22 (1975)
    678-687."""
    for _, found, system in pairs:
        assert len(found) % 2 == 1
        assert sum(signs(found, system)) == 1


def test_a_wrong_sign_is_unstable_for_every_stray_capacitance(pairs):
    """M. M. Green, A. N. Willson, How to identify unstable dc operating points, IEEE Trans. CAS-I 39 (1992) 820-832."""
    random = np.random.default_rng(5)
    seen = 0
    for _, found, system in pairs:
        for point, sign in zip(found, signs(found, system), strict=True):
            if sign > 0:
                continue
            seen += 1
            J = system.jacobian(point.x)
            for _ in range(6):
                root = np.diag(10 ** random.uniform(-7, -5, system.n)) @ random.normal(size=(system.n, system.n))
                strays = root @ root.T + np.diag(10 ** random.uniform(-13, -9, system.n))
                rates = np.linalg.eigvals(np.linalg.solve(strays, -J))
                growing = rates[rates.real > 0]
                assert np.any(np.abs(growing.imag) < 1e-6 * np.abs(growing.real))
            assert point.stable is False
            assert point.verdict == "unstable, whatever the strays"
    assert seen >= 5


def test_almost_half_of_the_points_are_unstable(pairs):
    """M. M. Green, A. N. Willson, (Almost) half of any circuit's operating points are unstable, IEEE Trans. CAS-I 41 (1994)
    286-293."""
    for _, found, _ in pairs:
        stable = sum(point.stable is True for point in found)
        unstable = sum(point.stable is False for point in found)
        assert stable <= unstable + 1
        assert unstable >= (len(found) - 1) // 2


def test_counts_stay_below_the_general_bound(pairs):
    """J. C. Lagarias, Lj. Trajkovic, IEEE Trans. CAS-I 46 (1999) 1216-1221: at most (d + 1)^d 2^(d (d - 1) / 2), d = q + 2
    p. Far from tight; and no cap of three: two transistors can have five points (Nakaya, Nishi, Oishi, Claus 2009)."""
    d = 4
    bound = (d + 1) ** d * 2 ** math.comb(d, 2)
    assert bound == 40000
    assert all(len(found) <= bound for _, found, _ in pairs)


@pytest.mark.parametrize("seed", range(15))
def test_one_transistor_has_one_point(seed):
    """R. O. Nielsen, A. N. Willson, Proc. IEEE 68 (1980) 196-208: no feedback structure without a second transistor."""
    found = states(one_transistor(seed))
    assert found.complete
    assert len(found) == 1


@pytest.mark.parametrize("seed", range(20))
def test_increasing_parts_have_one_point_between_the_supplies(seed):
    """Uniqueness: R. J. Duffin 1947. Bound: no-gain networks, A. N. Willson, IEEE Trans. CAS 22 (1975) 678-687."""
    circuit = junction_network(seed)
    found = states(circuit)
    assert found.complete
    assert len(found) == 1
    sources = [part.fields["voltage"].value for part in circuit.parts if part.device == "voltage_source"]
    low, high = min(0.0, *sources), max(0.0, *sources)
    assert all(low - 1e-9 <= volts <= high + 1e-9 for volts in found[0].nets.values())


def test_no_net_of_a_pair_of_transistors_leaves_the_supplies(pairs):
    """No-gain networks, A. N. Willson, IEEE Trans. CAS 22 (1975) 678-687: every net lies between the extreme source potentials. The
    supplies are currents beside resistors: their potential is that of the two without load."""
    for circuit, found, _ in pairs:
        fields = {part.name: part.fields for part in circuit.parts}
        top = max(
            fields[name]["current"].value * fields[name.replace("_source", "_resistor")]["resistance"].value
            for name in fields if name.endswith("_source")
        )  # fmt: skip
        for point in found:
            assert all(-1e-9 <= volts <= top + 1e-9 for volts in point.nets.values())


@pytest.mark.parametrize("seed", range(10))
def test_principal_minors_of_a_junction_network_are_not_negative(seed):
    """I. W. Sandberg, A. N. Willson, SIAM J. Appl. Math. 19 (1970): F(v) + A v = b has one solution for every increasing F
    and every b if and only if A is P0; the conductance matrix seen by two-terminal junctions always is."""
    circuit = junction_network(seed)
    system = assemble(circuit)
    # seen from the junctions: impedance Z = V_T W G^-1 B with unit currents; P0 holds for Z where it holds for its inverse
    lines = system.W / np.max(np.abs(system.W), axis=1, keepdims=True)
    columns = system.B / np.max(np.abs(system.B), axis=0, keepdims=True)
    Z = lines @ np.linalg.solve(system.G, columns)
    scale = np.max(np.abs(Z))
    for size in range(1, len(Z) + 1):
        for chosen in itertools.combinations(range(len(Z)), size):
            assert np.linalg.det(Z[np.ix_(chosen, chosen)] / scale) > -1e-12


@pytest.mark.parametrize("seed", range(12))
def test_power_balances_at_every_point(seed):
    """B. D. H. Tellegen: the sum of voltage times current over all branches is nil at any solution."""
    circuit = two_transistors(seed)
    for point in states(circuit):
        currents = pin_currents(circuit, point.x)
        total, size = 0.0, 0.0
        for part in circuit.parts:
            if "from" in part.pins:
                power = (point[part.pins["from"]] - point[part.pins["to"]]) * currents[part.name]
                terms = [power]
            else:
                terms = [point[net] * currents[f"{part.name}.{pin}"] for pin, net in part.pins.items()]
                assert abs(sum(currents[f"{part.name}.{pin}"] for pin in part.pins)) < 1e-12
            total += sum(terms)
            size += sum(abs(term) for term in terms)
        assert abs(total) < 1e-9 * size + 1e-15
