"""Finite eigenvalues of C x' = -J x with their error bounds, against extended precision; the sign of a determinant against rational
arithmetic."""

from fractions import Fraction

import mpmath
import numpy as np
import pytest

from loopsim.numerics.spectrum import determinant_signs, equilibrate, spectra


def exact_determinant(matrix):
    """By fractions, without rounding."""
    rows = [[Fraction(float(v)) for v in row] for row in matrix]
    total = Fraction(1)
    for k in range(len(rows)):
        pivot = next((i for i in range(k, len(rows)) if rows[i][k] != 0), None)
        if pivot is None:
            return Fraction(0)
        if pivot != k:
            rows[k], rows[pivot] = rows[pivot], rows[k]
            total = -total
        total *= rows[k][k]
        for i in range(k + 1, len(rows)):
            factor = rows[i][k] / rows[k][k]
            rows[i] = [a - factor * b for a, b in zip(rows[i], rows[k], strict=True)]
    return total


def exact_rates(J, C):
    """Finite roots of det(J + s C) in 60 digits for C = diag(c, 0): the rows without dynamics are eliminated first."""
    with mpmath.workdps(60):
        k = int(np.count_nonzero(np.diag(C)))
        A = mpmath.matrix(J.tolist())
        n = len(J)
        if k < n:
            A = A[0:k, 0:k] - A[0:k, k:n] * (A[k:n, k:n] ** -1) * A[k:n, 0:k]
        M = mpmath.matrix([[-A[i, j] / mpmath.mpf(float(C[i, i])) for j in range(k)] for i in range(k)])
        return np.array([complex(v) for v in mpmath.eig(M, left=False, right=False)])


def assert_within_their_bounds(spectrum, exact):
    assert len(spectrum.values) == len(exact)
    left = list(exact)
    for value, error in zip(spectrum.values, spectrum.errors, strict=True):
        nearest = min(left, key=lambda other: abs(other - value))
        assert abs(nearest - value) <= error, f"{value} +/- {error}: {nearest}"
        left.remove(nearest)


@pytest.mark.parametrize("decades", [0, 4, 14])
def test_the_sign_of_a_determinant_is_right_however_its_rows_are_scaled(decades):
    random = np.random.default_rng(61)
    for n in (1, 2, 3, 5, 8):
        matrices = random.normal(size=(20, n, n))
        matrices *= 10 ** random.uniform(-decades, decades, (20, n, 1)) * 10 ** random.uniform(-decades, decades, (20, 1, n))
        found = determinant_signs(matrices)
        assert found.tolist() == [int(np.sign(exact_determinant(m))) for m in matrices]


def test_a_matrix_that_is_singular_to_working_precision_has_no_sign():
    one = np.array([[1.0, 2.0], [2.0, 4.0]])
    near = np.array([[1.0, 2.0], [2.0, np.nextafter(4.0, 5.0)]])
    assert determinant_signs(np.array([one, near, np.zeros((2, 2))])).tolist() == [0, 0, 0]
    assert determinant_signs(np.zeros((3, 0, 0))).tolist() == [1, 1, 1]


def test_equilibration_changes_no_digit():
    random = np.random.default_rng(62)
    matrix = random.normal(size=(5, 5)) * 10 ** random.uniform(-12, 12, (5, 5))
    rows, columns = equilibrate(matrix)
    scaled = matrix * rows[:, None] * columns
    assert np.array_equal(scaled / columns / rows[:, None], matrix)
    assert np.all(np.abs(np.log2(np.abs(scaled).max(axis=1))) < 2)


def graded(seed, decades):
    """(J, C): two to six unknowns, one third of them without dynamics, entries of J over twice as many decades, of C over six."""
    random = np.random.default_rng([63, seed])
    n = int(random.integers(2, 7))
    dynamic = max(1, n - n // 3)
    J = random.normal(size=(n, n)) * 10 ** random.uniform(-3 - decades, -3 + decades, (n, n)) + np.diag(10 ** random.uniform(-4, -2, n))
    return J, np.diag(np.concatenate([10 ** random.uniform(-12, -6, dynamic), np.zeros(n - dynamic)]))


@pytest.mark.parametrize("decades", [0, 1, 4])
@pytest.mark.parametrize("block", [0, *(pytest.param(k, marks=pytest.mark.slow) for k in range(1, 8))])
def test_rates_lie_within_their_bounds(block, decades):
    for seed in range(40 * block, 40 * block + 40):
        J, C = graded(seed, decades)
        assert_within_their_bounds(spectra(J[None], C)[0], exact_rates(J, C))


@pytest.mark.parametrize("apart", [1e-4, 1e-7, 1e-9])
def test_bounds_count_what_was_eliminated(apart):
    """Two nets without dynamics that nearly decide each other: their elimination blurs the rates, and the bounds say so."""
    random = np.random.default_rng(65)
    worst = 0.0
    for _ in range(20):
        J = random.normal(size=(4, 4))
        J[3] = J[2] + np.array([random.normal(), random.normal(), 0.0, apart])
        C = np.diag([1.0, 2.0, 0.0, 0.0])
        found, exact = spectra(J[None], C)[0], exact_rates(J, C)
        assert_within_their_bounds(found, exact)
        worst = max(worst, float(np.max(np.min(np.abs(exact[:, None] - found.values), axis=1) / np.abs(exact))))
    assert worst > 1e-18 / apart


def test_bounds_are_not_needlessly_wide():
    """Well-conditioned networks: below a billionth of the rate."""
    for seed in range(40):
        J, C = graded(seed, 0)
        found = spectra((J + 1e-2 * np.eye(len(J)))[None], C)[0]
        assert np.all(found.errors < 1e-9 * np.abs(found.values))


def test_picoseconds_and_kiloseconds_stand_in_one_circuit():
    """Two coupled nets: both rates to eight digits although they lie fifteen decades apart."""
    J = np.array([[2e-3, -1e-3], [-1e-3, 2e-3]])
    C = np.diag([1e-15, 1.0])
    found = spectra(J[None], C)[0]
    exact = np.sort(exact_rates(J, C).real)[::-1]
    assert found.values.real == pytest.approx(exact, rel=1e-8)
    assert np.all(found.errors < 1e-6 * np.abs(found.values))


def test_a_hidden_constraint_is_projected_away():
    """Capacitors c1 = 1 nF and c2 = 2 nF in a loop with a source: one rate, -g / (c1 + c2), of an index 2 system."""
    g = 1e-3
    # v1 held by the source through its current i; capacitors from v1 to v2 and v2 to gnd
    C = np.array([[1e-9, -1e-9, 0.0], [-1e-9, 3e-9, 0.0], [0.0, 0.0, 0.0]])
    J = np.array([[0.0, 0.0, 1.0], [0.0, g, 0.0], [1.0, 0.0, 0.0]])
    found = spectra(J[None], C)[0]
    assert found.values == pytest.approx([-g / 3e-9], rel=1e-10)


def test_without_dynamics_there_are_no_rates():
    found = spectra(np.eye(3)[None], np.zeros((3, 3)))
    assert [len(one.values) for one in found] == [0]


def test_a_defective_pair_has_a_wide_bound():
    """A double root splits by the square root of the rounding: the bound covers it."""
    J = np.array([[1.0, -1.0], [0.0, 1.0]])
    found = spectra(J[None], np.eye(2))[0]
    assert np.all(np.abs(found.values + 1.0) <= found.errors)


def test_a_batch_equals_a_loop_of_singles():
    random = np.random.default_rng(64)
    J = random.normal(size=(6, 4, 4))
    C = np.diag([1.0, 2.0, 0.5, 0.0])
    together = spectra(J, C)
    for one, alone in zip(together, (spectra(j[None], C)[0] for j in J), strict=True):
        assert np.allclose(one.values, alone.values, rtol=1e-12)
