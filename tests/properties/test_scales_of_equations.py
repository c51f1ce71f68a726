"""Multiplying equations by powers of two, or measuring unknowns in other units, changes no answer: nothing in the proof may
rest on an absolute size (a floating-point solver's word `infeasible` was seen to turn wrong by a mere change of unit)."""

from dataclasses import replace

import numpy as np
import pytest
from array_systems import assert_points, solve
from generated import case


def with_rows_scaled(system, powers):
    """Each equation times 2^power."""
    factor = 2.0**powers
    scaled = {name: getattr(system, name) * factor[:, None] for name in ("G", "B", "C")}
    return replace(system, **scaled, s=system.s * factor, supply=system.supply * factor)


def with_unknowns_scaled(system, power):
    """Each unknown measured in 2^-power of its unit: x' = 2^power x."""
    factor = 2.0**-power
    return replace(system, G=system.G * factor, W=system.W * factor, V=system.V * factor, C=system.C * factor)


@pytest.mark.parametrize("seed", range(30))
def test_scale_of_the_equations(seed):
    made, box = case(seed)
    powers = np.random.default_rng([61, seed]).integers(-60, 60, made.system.n).astype(float)
    plain = solve(made.system, box, budget=20.0)
    other = solve(with_rows_scaled(made.system, powers), box, budget=20.0)
    assert plain.complete
    assert other.complete
    assert len(plain.x) == len(other.x) == made.count
    assert_points(other.x, plain.x, 1e-9)


@pytest.mark.parametrize("seed", range(30))
@pytest.mark.parametrize("power", [-20.0, 10.0])
def test_unit_of_the_unknowns(seed, power):
    made, box = case(seed)
    plain = solve(made.system, box, budget=20.0)
    other = solve(with_unknowns_scaled(made.system, power), box * 2.0**power, budget=20.0)
    if other.complete:
        assert len(other.x) == made.count
        assert np.allclose(np.sort(other.x[:, 0]) * 2.0**-power, np.sort(plain.x[:, 0]), rtol=1e-7, atol=1e-9)
    assert len(other.x) <= made.count
    assert power < 0 or other.complete
