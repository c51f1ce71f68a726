"""Radau IIA over arrays: identities of the method, both linear solvers, the loop with and without the compiler, its safeguards."""

import numpy as np
import pytest
import scipy.sparse
from numpy.typing import NDArray

from loopsim.devices.phi import SLOPE, VALUE, Kind
from loopsim.numerics import kernel, radau
from loopsim.numerics.radau import Equations, Waves, crossings, equations, integrate, sparse_factors, tableau

Array = NDArray[np.float64]


@pytest.mark.parametrize("stages", [3, 5, 7])
def test_the_tableau_meets_its_order_conditions(stages: int) -> None:
    method = tableau(stages)
    c, A = method.nodes, method.A
    for k in range(1, stages + 1):  # the stages integrate polynomials up to degree k - 1 exactly
        assert np.allclose(A @ c ** (k - 1), c**k / k, rtol=0.0, atol=1e-14)
    for k in range(1, 2 * stages):  # and the last one up to degree 2 k - 2
        assert A[-1] @ c ** (k - 1) == pytest.approx(1.0 / k, abs=1e-14)


@pytest.mark.parametrize("stages", [3, 5, 7])
def test_the_transformation_splits_the_tableau_into_blocks(stages: int) -> None:
    method = tableau(stages)
    blocks = np.zeros((stages, stages))
    blocks[0, 0] = method.order_real
    for p, (re, im) in enumerate(zip(method.pairs_real, method.pairs_imaginary, strict=True)):
        blocks[1 + 2 * p : 3 + 2 * p, 1 + 2 * p : 3 + 2 * p] = [[re, -im], [im, re]]
    again = method.transform @ blocks @ method.inverse
    assert np.allclose(again, np.linalg.inv(method.A), rtol=0.0, atol=1e-13 * np.abs(again).max() * np.linalg.cond(method.transform))


def test_the_error_weights_of_three_stages_are_the_published_ones() -> None:
    # Hairer, Wanner, Solving ODE II, IV.8: -(13 + 7 sqrt 6)/3, (-13 + 7 sqrt 6)/3, -1/3 (from memory)
    root = np.sqrt(6.0)
    method = tableau(3)
    expected = np.array([-(13.0 + 7.0 * root), -13.0 + 7.0 * root, -1.0]) / 3.0
    assert np.allclose(method.order_real * method.error_weights, expected, rtol=1e-13)


@pytest.mark.parametrize("n", [1, 2, 3, 7, 12])
@pytest.mark.parametrize("shift", [0.7, 0.7 + 1.3j])
def test_full_factors_solve_any_matrix(n: int, shift: complex) -> None:
    rng = np.random.default_rng(n)
    for _ in range(20):
        mass, jac = rng.normal(size=(n, n)), rng.normal(size=(n, n))
        jac[rng.random((n, n)) < 0.3] = 0.0
        kind = np.complex128 if isinstance(shift, complex) else np.float64
        lu, pivots = np.zeros((n, n), dtype=kind), np.zeros(n, dtype=np.int64)
        sign = kernel.factor_dense(shift, mass.ravel(), jac.ravel(), lu, pivots)
        matrix = shift * mass + jac
        if kind is np.float64:
            assert sign == np.sign(np.linalg.det(matrix))
        right = rng.normal(size=n).astype(kind)
        found = right.copy()
        kernel.solve_dense(lu, pivots, found)
        assert np.allclose(matrix @ found, right, rtol=0.0, atol=1e-9)


def branch_network(n: int, seed: int) -> Equations:
    """A chain of resistors and capacitors, closed by a voltage source whose current is the last unknown: a zero on the diagonal."""
    rng = np.random.default_rng(seed)
    G, C = np.zeros((n, n)), np.zeros((n, n))
    for i in range(n - 2):
        g = rng.uniform(0.5, 2.0)
        G[i : i + 2, i : i + 2] += g * np.array([[1.0, -1.0], [-1.0, 1.0]])
        C[i, i] = rng.uniform(0.5, 2.0) if i % 3 else 0.0
    G[0, n - 1] = G[n - 1, 0] = 1.0
    m = n // 4
    B, W = np.zeros((n, m)), np.zeros((m, n))
    for k in range(m):
        B[3 * k + 1, k] = W[k, 3 * k + 1] = 1.0
    return equations(C, G, B, W, np.zeros(m), np.full(m, Kind.SATURATION))


def dense_parts(eq: Equations) -> tuple[Array, Array, Array, Array]:
    def matrix(rows: tuple[Array, Array, Array], width: int) -> Array:
        return scipy.sparse.csr_array((rows[2], rows[1], rows[0]), shape=(len(rows[0]) - 1, width)).toarray()

    joined = matrix(eq.rows, eq.n + eq.m)
    return matrix(eq.storage, eq.n), joined[:, : eq.n], joined[:, eq.n :], matrix(eq.control, eq.n)


@pytest.mark.parametrize("n", [13, 20, 60])
def test_sparse_factors_solve_a_network_with_a_zero_on_its_diagonal(n: int) -> None:
    eq = branch_network(n, n)
    x = np.random.default_rng(1).normal(size=n)
    method, step = tableau(3), 0.3
    places = sparse_factors(eq, x, step, method)
    jac = radau.jacobian_values(eq, x)
    C, G, B, W = dense_parts(eq)
    assert np.allclose(
        scipy.sparse.csr_array((jac, eq.pattern), shape=(n, n)).toarray(), G + B @ (SLOPE[Kind.SATURATION](W @ x, ())[:, None] * W)
    )
    for shift, kind in ((method.order_real / step, np.float64), (complex(2.7, 3.0) / step, np.complex128)):
        lu, work = np.zeros(len(places.lu_column), dtype=kind), np.zeros(n, dtype=kind)
        sign = kernel.factor_sparse(
            shift, eq.mass, jac, places.entry_start, places.entry_from, places.entry_column, places.lu_start, places.lu_column,
            places.lu_diagonal, 1e-9, lu, work,
        )  # fmt: skip
        assert sign != 0
        right = np.random.default_rng(2).normal(size=n).astype(kind)
        found = right.copy()
        kernel.solve_sparse(
            lu, places.lu_start, places.lu_column, places.lu_diagonal, places.row_order, places.column_order, work, found
        )
        matrix = shift * C + G + B @ (SLOPE[Kind.SATURATION](W @ x, ())[:, None] * W)
        assert np.allclose(matrix @ found, right, rtol=0.0, atol=1e-10)


def test_scalar_functions_are_those_of_the_arrays() -> None:
    w = np.array([-200.0, -3.0, -0.5, 0.0, 1e-9, 0.7, 1.0, 4.0, 130.0])
    p = np.array([0.3, -0.2, 0.5, 1.1, 1.5, -0.4])
    for kind in Kind:
        array_value, array_slope = VALUE[kind](w, p[:, None] * np.ones_like(w)), SLOPE[kind](w, p[:, None] * np.ones_like(w))
        assert np.allclose([kernel.phi_value(int(kind), v, p) for v in w], array_value, rtol=1e-14, atol=0.0), kind
        assert np.allclose([kernel.phi_slope(int(kind), v, p) for v in w], array_slope, rtol=1e-14, atol=0.0), kind


def test_the_loop_without_a_compiler_takes_the_same_steps(monkeypatch: pytest.MonkeyPatch) -> None:
    eq = branch_network(20, 3)
    source = np.zeros(20)
    source[-1] = 1.0
    waves = Waves(
        np.array([kernel.LINEAR, kernel.SINE]), (np.array([0.0, 0.0, 0.0, 1.0]), np.array([0.0, 1.0, 2.0, 0.3, 0.5])),
        np.array([np.zeros(20), 0.5 * source]), corners=lambda start, end: [0.5], fastest=np.pi,
    )  # fmt: skip
    compiled = integrate(eq, np.zeros(20), 0.0, 5.0, source, waves=waves, rtol=1e-5, atol=1e-5)
    monkeypatch.setattr(radau, "have_compiler", lambda: False)
    plain = integrate(eq, np.zeros(20), 0.0, 5.0, source, waves=waves, rtol=1e-5, atol=1e-5)
    assert plain.outcome == compiled.outcome == kernel.DONE
    assert abs(plain.accepted - compiled.accepted) <= 2
    times = np.linspace(0.0, 5.0, 101)
    assert np.allclose(plain.at(times), compiled.at(times), rtol=0.0, atol=1e-6)


def test_a_record_in_many_stretches_is_the_same_run() -> None:
    eq = equations(np.eye(2), np.array([[0.0, -1.0], [1.0, 0.0]]), np.zeros((2, 0)), np.zeros((0, 2)), [], [])
    waves = Waves(
        np.array([kernel.LINEAR, kernel.SINE]), (np.array([0.0, 0.0, 0.0, 1.0]), np.array([0.0, 1.0, 3.0, 0.0, 0.0])),
        np.array([np.zeros(2), np.array([1.0, 0.0])]), fastest=2.0,
    )  # fmt: skip
    run = integrate(eq, [0.0, 0.0], 0.0, 1000.0, [0.0, 0.0], waves=waves, rtol=1e-7, atol=1e-7)
    assert run.accepted > 2 * radau.FIRST_ROOM
    # x'' = -x + 3 cos 3t from rest with x'(0) = 0: x = 3 (cos t - cos 3t) / 8
    times = np.linspace(0.0, 1000.0, 997)
    assert np.allclose(run.at(times)[:, 0], 3.0 * (np.cos(times) - np.cos(3.0 * times)) / 8.0, rtol=0.0, atol=1e-5)
    assert np.all(np.diff(run.times) > 0.0) and run.end == 1000.0


@pytest.mark.parametrize("first_step", [1e-3, 1.0, 30.0])
def test_a_step_longer_than_what_grows_is_not_taken(first_step: float) -> None:
    # x' = x - x^3 just off 0: seen in one long step the growth looks like a decay, and the run would stay at 0
    eq = equations(np.eye(1), np.zeros((1, 1)), np.eye(1), np.eye(1), [0.0], [Kind.POLYNOMIAL], np.array([[-1.0, 0.0, 1.0]]))
    run = integrate(eq, [1e-9], 0.0, 60.0, [0.0], rtol=1e-6, atol=1e-12, first_step=first_step)
    assert run.end_x[0] == pytest.approx(1.0, abs=1e-6)


def test_a_solution_that_runs_away_stops_there() -> None:
    # x' = x^2 from 1 is 1 / (1 - t)
    eq = equations(np.eye(1), np.zeros((1, 1)), -np.eye(1), np.eye(1), [0.0], [Kind.POLYNOMIAL], np.array([[0.0, 1.0]]))
    run = integrate(eq, [1.0], 0.0, 2.0, [0.0], rtol=1e-6, atol=1e-9)
    assert run.outcome == kernel.TOO_SMALL
    assert run.end == pytest.approx(1.0, abs=1e-3)
    half = run.at([0.5])[0, 0]
    assert half == pytest.approx(2.0, rel=1e-5)


def test_a_jump_of_a_source_belongs_to_neither_side() -> None:
    # a square that falls within one representable gap: before it the old formula holds, behind it the new one
    pieces = np.zeros(3)
    data = np.array([2.0, 1.0, 0.0, 0.0, 0.5, 4.0, 1.0, 4.0, 1.5, 0.0])
    for time, expected in ((0.5, 0.0), (1.25, 2.0), (1.75, 4.0), (2.25, 2.0), (2.75, 0.0), (3.25, 2.0)):
        kernel.wave_piece(kernel.LINEAR, data, 0, len(data), time, pieces)
        assert kernel.wave_at(kernel.LINEAR, data, 0, pieces, time) == pytest.approx(expected)
    kernel.wave_piece(kernel.LINEAR, data, 0, len(data), 1.25, pieces)
    assert kernel.wave_at(kernel.LINEAR, data, 0, pieces, 1.5) == pytest.approx(4.0)  # the rising piece carried to its own end


def test_crossings_are_found_to_rounding() -> None:
    eq = equations(np.eye(2), np.array([[0.0, -1.0], [1.0, 0.0]]), np.zeros((2, 0)), np.zeros((0, 2)), [], [])
    run = integrate(eq, [0.0, 1.0], 0.0, 20.0, [0.0, 0.0], rtol=1e-9, atol=1e-9)
    times, signs = crossings(run, 0, 0.5)
    exact = sorted([np.pi / 6 + 2 * np.pi * k for k in range(4)] + [5 * np.pi / 6 + 2 * np.pi * k for k in range(3)])
    exact = [t for t in exact if t < 20.0]
    assert np.allclose(times, exact, rtol=0.0, atol=1e-8)
    assert list(signs) == [1 if k % 2 == 0 else -1 for k in range(len(exact))]


def test_tolerances_may_differ_between_unknowns() -> None:
    eq = equations(np.eye(2), np.diag([1.0, 1.0]), np.zeros((2, 0)), np.zeros((0, 2)), [], [])
    loose = integrate(eq, [1.0, 1.0], 0.0, 1.0, [0.0, 0.0], rtol=np.array([1e-2, 1e-2]), atol=1e-3)
    tight = integrate(eq, [1.0, 1.0], 0.0, 1.0, [0.0, 0.0], rtol=np.array([1e-2, 1e-8]), atol=1e-9)
    assert tight.accepted > loose.accepted


def test_an_unknown_without_weight_does_not_hold_the_run_up() -> None:
    eq = equations(np.diag([1.0, 1.0]), np.diag([1.0, 1e6]), np.zeros((2, 0)), np.zeros((0, 2)), [], [])
    both = integrate(eq, [1.0, 1.0], 0.0, 1.0, [0.0, 0.0], rtol=1e-8, atol=1e-10)
    one = integrate(eq, [1.0, 1.0], 0.0, 1.0, [0.0, 0.0], rtol=1e-8, atol=1e-10, error_weight=[1.0, 0.0])
    assert one.accepted < both.accepted
    assert one.end_x[0] == pytest.approx(np.exp(-1.0), abs=1e-8)


def test_outside_of_what_ran_there_is_nothing() -> None:
    eq = equations(np.eye(1), np.eye(1), np.zeros((1, 0)), np.zeros((0, 1)), [], [])
    run = integrate(eq, [1.0], 0.0, 1.0, [0.0])
    empty = radau.Path(
        run.times[:0], run.steps[:0], run.starts[:0], run.polynomials[:0], 0.0, run.end_x, 2, 0, 0, 0, 0, 0, 0
    )  # fmt: skip
    with pytest.raises(ValueError, match="no step"):
        empty.at([0.0])
