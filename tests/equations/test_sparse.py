"""Sparse arrays give what dense ones give."""

import numpy as np
import pytest
import scipy.sparse.linalg
from probing import solve
from test_assemble import KILN
from test_balance import random_circuit

from loopsim.build import CircuitBuilder
from loopsim.equations.assemble import assemble
from loopsim.equations.sparse import SPARSE_FROM, SparseSystem, assemble_by_size, assemble_sparse
from loopsim.equations.system import System
from loopsim.errors import CircuitError


@pytest.mark.parametrize("settings", [{}, {"ohms": 1234.0, "ambient": 60.0, "early": 30.0, "supply": 7.0}])
def test_residual_and_jacobian_are_those_of_the_dense_system(settings):
    dense, thin = assemble(KILN, settings), assemble_sparse(KILN, settings)
    rng = np.random.default_rng(11)
    for _ in range(5):
        x = rng.normal(0.3, 0.3, dense.n)
        assert np.allclose(thin.residual(x), dense.residual(x), rtol=1e-9, atol=1e-12)
        assert np.allclose(thin.jacobian(x).toarray(), dense.jacobian(x), rtol=1e-12, atol=1e-18)
    assert np.array_equal(thin.C.toarray(), dense.C)
    assert thin.unknowns == dense.unknowns
    assert (thin.n, thin.m) == (dense.n, dense.m)


@pytest.mark.parametrize("seed", range(6))
def test_random_circuits_agree(seed):
    circuit = random_circuit(seed)
    dense, thin = assemble(circuit), assemble_sparse(circuit)
    x = solve(dense)
    assert np.allclose(thin.jacobian(x).toarray(), dense.jacobian(x), rtol=1e-12, atol=1e-18)
    step = thin.factor(x).solve(thin.residual(x))
    assert np.max(np.abs(step)) < 1e-8


def test_a_long_ladder_is_solved_with_sparse_factors():
    b = CircuitBuilder("ladder")
    b.chain("gnd", "v", "n0", device="voltage_source", voltage=5.0)
    for j in range(1500):
        b.chain(f"n{j}", f"r{j}", f"n{j + 1}", device="resistor", resistance=1.0)
        b.chain(f"n{j + 1}", f"g{j}", "gnd", device="resistor", resistance=1e5)
    system = assemble_sparse(b.circuit())
    x = system.factor(np.zeros(system.n)).solve(system.s)
    assert np.max(np.abs(system.residual(x))) < 1e-12
    # an endless ladder falls by a factor 1 + z - sqrt(z^2 + 2 z), z = R / (2 G^-1), a section (closed form)
    z = 0.5e-5
    fall = 1.0 + z - np.sqrt(z * z + 2.0 * z)
    assert x[100] / x[99] == pytest.approx(fall, rel=5e-5)


def test_a_circuit_without_nonlinear_rows_has_a_jacobian_too():
    b = CircuitBuilder("linear")
    b.chain("gnd", "v", "a", device="voltage_source", voltage=2.0)
    b.chain("a", "r", "gnd", device="resistor", resistance=4.0)
    system = assemble_sparse(b.circuit())
    assert system.factor(np.zeros(2)).solve(system.s) == pytest.approx([2.0, 0.5])


def test_the_size_decides_between_dense_and_sparse():
    assert isinstance(assemble_by_size(KILN), System)
    b = CircuitBuilder("long")
    for j in range(SPARSE_FROM):
        b.chain(f"n{j}" if j else "gnd", f"r{j}", f"n{j + 1}", device="resistor", resistance=1.0)
    assert isinstance(assemble_by_size(b.circuit()), SparseSystem)


def test_a_batch_is_refused():
    with pytest.raises(CircuitError) as fault:
        assemble_sparse(KILN, {"ohms": np.ones(3) * 1e3})
    assert fault.value.code == "setting-shape"


def test_a_singular_system_is_told_by_the_factorisation():
    b = CircuitBuilder("singular")
    b.chain("gnd", "v", "a", device="voltage_source", voltage=2.0)
    b.chain("gnd", "w", "a", device="voltage_source", voltage=2.0)
    with pytest.raises(RuntimeError):
        assemble_sparse(b.circuit()).factor(np.zeros(3))
    assert scipy.sparse.linalg.splu is not None
