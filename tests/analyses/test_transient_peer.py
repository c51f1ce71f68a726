"""SUNDIALS IDA, given the same arrays, goes the same way on the shipped circuits that have dynamics."""

from pathlib import Path

import numpy as np
import pytest

import loopsim
from loopsim.analyses.motion import motion, newton
from loopsim.equations.assemble import assemble

sksundae = pytest.importorskip("sksundae")

ROOT = Path(__file__).parents[2]
FILES = sorted(path for path in (ROOT / "circuits").glob("*/*.loop") if path.parent.name != "parts")
DURATION, RAMP = 20e-6, 10e-6
# which side these fall to is rounding's choice
SYMMETRIC = {"cistern_blinker", "tide_tone", "frost_alarm", "float_switch", "hive_flag", "hive_ring", "counter_margin"}


@pytest.mark.slow
@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_the_rise_of_the_supplies_is_the_same(path: Path) -> None:
    system = assemble(loopsim.load(str(path)))
    if not np.any(system.C) or system.timed:
        pytest.skip("nothing moves of its own")
    x = newton(system, np.zeros(system.n), system.s - system.supply)
    assert x is not None
    plan = motion(system, x, DURATION, RAMP)
    ours = plan.solve(x, 0.0, DURATION, 1e-7)
    assert ours.outcome == 0

    def residual(t: float, y: np.ndarray, yp: np.ndarray, res: np.ndarray) -> None:
        share = min(t / RAMP, 1.0)
        res[:] = system.C @ yp + system.residual(y, system.s - (1.0 - share) * system.supply)

    free = np.flatnonzero(~np.any(system.C != 0.0, axis=0)).tolist()
    times = np.linspace(0.0, DURATION, 11)
    for options in ({"calc_initcond": "yp0", "calc_init_dt": 1e-9}, {"calc_initcond": "y0", "calc_init_dt": 1e-9}, {"first_step": 1e-12}):
        solver = sksundae.ida.IDA(
            residual, rtol=1e-7, atol=1e-9, max_num_steps=1_000_000, max_step=RAMP / 50.0, algebraic_idx=free or None, **options
        )  # fmt: skip
        found = solver.solve(times, x, np.zeros(system.n))
        if found.success:
            break
    else:
        pytest.skip("the peer gives up here")
    nets = [j for j, (kind, _) in enumerate(system.unknowns) if kind == "net"]
    seen = times <= (2e-6 if path.stem in SYMMETRIC else DURATION)
    assert np.allclose(ours.at(times[seen])[:, nets], found.y[seen][:, nets], rtol=0.0, atol=2e-3 * plan.volts)
