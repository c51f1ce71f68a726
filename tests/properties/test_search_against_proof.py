"""What a search finds, the proof must have: Newton's method from many starts never ends at a point that a `complete` list
leaves out."""

import numpy as np
import pytest
from array_systems import solve
from random_circuits import any_network, formula_network

from loopsim.equations.assemble import assemble

STARTS = 300
BOX = 1e3  # V


def searched(system, seed):
    """(k, n) points where a damped Newton iteration from random starts comes to rest within the box."""
    random = np.random.default_rng([35, seed])
    x = random.uniform(-1, 1, (STARTS, system.n)) * 10 ** random.uniform(-1, 1.6, (STARTS, 1))
    with np.errstate(all="ignore"):
        for k in range(150):
            J, F = system.jacobian(x), system.residual(x)
            bad = ~(np.all(np.isfinite(J), axis=(1, 2)) & np.all(np.isfinite(F), axis=1))
            J[bad], F[bad] = np.eye(system.n), 0.0
            size = np.abs(np.linalg.slogdet(J)[1])
            J[size > 600] = np.eye(system.n)
            try:
                step = np.linalg.solve(J, F[..., None])[..., 0]
            except np.linalg.LinAlgError:
                step = (np.linalg.pinv(J) @ F[..., None])[..., 0]
            step = np.where(np.isfinite(step), step, 0.0)
            reach = np.max(np.abs(step), axis=1, keepdims=True)
            limit = 0.5 if k < 100 else 1e3
            x = x - step * np.minimum(1.0, limit / np.maximum(reach, 1e-300))
        residual = np.abs(system.residual(x))
    scale = 1e-12 + 1e-9 * (np.abs(x) @ np.abs(system.G).T + np.abs(system.s))
    rests = np.all(residual < scale, axis=1) & (reach[:, 0] < 1e-9) & np.all(np.abs(x) < BOX, axis=1)
    return x[rests]


def compared(seed, budget, maker=any_network):
    """Whether the list was complete and so could be compared."""
    system = assemble(maker(seed))
    found = solve(system, BOX, budget=budget)
    if not found.complete:
        return False
    for x in searched(system, seed):
        distance = np.max(np.abs(found.x - x) / (1.0 + np.abs(x)), axis=1) if len(found.x) else np.array([np.inf])
        assert distance.min() < 1e-5, f"seed {seed}: a search found {x}, the proof has {found.x}"
    return True


def test_no_search_finds_what_the_proof_left_out():
    assert sum(compared(seed, budget=2.0) for seed in range(24)) >= 8


@pytest.mark.slow
@pytest.mark.parametrize("block", range(10))
def test_no_search_finds_what_the_proof_left_out_in_five_hundred(block):
    assert sum(compared(100 + 50 * block + k, budget=10.0) for k in range(50)) >= 25


def test_no_search_finds_what_the_proof_left_out_of_networks_with_formulas():
    assert sum(compared(seed, 2.0, formula_network) for seed in range(10)) >= 8


@pytest.mark.slow
@pytest.mark.parametrize("block", range(4))
def test_no_search_finds_what_the_proof_left_out_of_two_hundred_networks_with_formulas(block):
    assert sum(compared(100 + 50 * block + k, 10.0, formula_network) for k in range(50)) >= 45
