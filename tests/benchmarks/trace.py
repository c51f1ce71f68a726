"""How long a traced characteristic and its trip points take. Prints a table of one run.

    OMP_NUM_THREADS=1 python tests/benchmarks/trace.py [--quick]

Times are processor time of this process on one thread, the median of a few repeats; compare the rows of one run, not runs. The peer for
trip points is `scipy.optimize.fsolve` in a loop over samples, given the same fold equations (F = 0, J v = 0, l . v = 1) in as few unknowns.
"""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
from scipy.optimize import fsolve

ROOT = Path(__file__).parents[2]
sys.path[:0] = [str(ROOT)]

from clock import median_time

import loopsim
from loopsim.analyses.family import Family
from loopsim.analyses.points import all_points
from loopsim.analyses.trace import _scale
from loopsim.analyses.trace_curves import curves, starts_of
from loopsim.analyses.trip_points import _line
from loopsim.equations.assemble import let_range
from loopsim.equations.condensed import arguments, condense, good_shift
from loopsim.numerics.fold_batch import null_vectors

CIRCUITS = (
    ("comparators/cistern_pump.loop", "level"),
    ("comparators/ferry_lamp_dusk.loop", "glow"),
    ("curves/curve_pair.loop", "supply"),
    ("comparators/tide_gauge_gates.loop", "tide"),
)


def traces(repeats: int) -> None:
    print("| circuit | folds | points | 11 stations, ms | and over the range, ms | covered | us a point | one dense solve, us |")
    print("| --- | --- | --- | --- | --- | --- | --- | --- |")
    for file, along in CIRCUITS:
        circuit = loopsim.load(str(ROOT / "circuits" / file))
        stations = median_time(lambda c=circuit, a=along: c.trace(a, range_budget=0.0), repeats)
        whole = median_time(lambda c=circuit, a=along: c.trace(a), repeats)
        curve = circuit.trace(along)
        points = sum(len(branch.values) for branch in curve.branches)
        n = curve.branches[0].x.shape[1]
        follow = median_time(lambda c=circuit, a=along: _followed(c, a), repeats) / points
        matrix, right = np.random.default_rng(0).standard_normal((n, n)) + n * np.eye(n), np.ones(n)
        solve = median_time(lambda m=matrix, r=right: [np.linalg.solve(m, r) for _ in range(1000)], repeats) / 1000
        covered = "all" if curve.over_range else f"{len(curve.gaps)} gaps" if curve.gaps else "no"
        print(
            f"| {Path(file).stem} along {along} | {len(curve.folds)} | {points} | {1e3 * stations:.0f} | {1e3 * whole:.0f} | {covered} |"
            f" {1e6 * follow:.0f} | {1e6 * solve:.0f} |"
        )


def _followed(circuit: loopsim.Circuit, along: str) -> None:
    """Only the following of the curves: no verdicts, no folds."""
    if circuit.name not in KNOWN:
        low, high = let_range(circuit, along) or (0.0, 1.0)
        family = Family(circuit, {}, along, low, high)
        values = np.linspace(low, high, 11)
        proved = [all_points(family.system(float(value)), 1e3) for value in values]
        KNOWN[circuit.name] = (family, starts_of(values, proved), (), _scale(family, [points.x for points in proved], high - low))
    curves(*KNOWN[circuit.name], np.inf)


KNOWN: dict[str, tuple[Any, ...]] = {}


def trips(repeats: int, samples: int, peer: int) -> None:
    print(f"\n| circuit | trip points | {samples:,} samples, ms | us a trip point | SciPy loop, us a trip point | times |")
    print("| --- | --- | --- | --- | --- | --- |")
    for file, along in CIRCUITS[:2]:
        circuit = loopsim.load(str(ROOT / "circuits" / file))
        nominal = circuit.trace(along, range_budget=0.0)
        ours = median_time(lambda c=circuit, a=along, n=nominal: c.trip_points(a, samples=samples, nominal=n), repeats)
        spread = circuit.trip_points(along, samples=peer, nominal=nominal)
        began = time.process_time()
        found = scipy_loop(circuit, spread)
        each = (time.process_time() - began) / found.size
        assert np.allclose(found, spread.at, rtol=1e-6), "the peer found other trip points"
        mine = ours / (samples * len(nominal.folds))
        print(
            f"| {Path(file).stem} along {along} | {len(nominal.folds)} | {1e3 * ours:.0f} | {1e6 * mine:.1f} | {1e6 * each:.0f} |"
            f" {each / mine:.0f} |"
        )


def scipy_loop(circuit: loopsim.Circuit, spread: loopsim.analyses.trip_points.TripPoints) -> np.ndarray:
    """The same folds one by one: fsolve on (F, J v, l . v - 1), in the arguments of the nonlinear rows."""
    curve = spread.nominal
    table = dict(zip(spread.parameters, spread.samples.T, strict=True))
    system, rise = _line(circuit, curve.along, curve.low, curve.high, table)
    found = np.empty_like(spread.at)
    whole = condense(system, rise, good_shift(system, curve.folds[0].x), len(spread.samples))
    for f, fold in enumerate(curve.folds):
        K, p, q = whole.K, whole.p, whole.q
        start = np.array(np.broadcast_to(arguments(system, np.broadcast_to(fold.x, (len(K), system.n))), p.shape))
        _, v = null_vectors(whole.jacobian(start, np.full(len(K), fold.at)).mean(axis=0))
        k = p.shape[1]
        for i in range(len(K)):
            one = type(whole)(system, whole.shift, whole.products, K[i : i + 1], p[i : i + 1], q[i : i + 1], whole.x0, whole.x1, whole.X)

            def equations(z: np.ndarray, one: object = one, k: int = k, v: np.ndarray = v) -> np.ndarray:
                y, w, level = z[None, :k], z[k : 2 * k], z[2 * k :]
                J = one.jacobian(y, level)[0]  # type: ignore[attr-defined]
                return np.concatenate([one.residual(y, level)[0], J @ w, [v @ w - 1.0]])  # type: ignore[attr-defined]

            found[i, f] = fsolve(equations, np.concatenate([start[i], v, [fold.at]]), xtol=1e-11)[-1]
    return found


if __name__ == "__main__":
    parser = argparse.ArgumentParser()
    parser.add_argument("--quick", action="store_true", help="one repeat, fewer samples")
    quick = parser.parse_args().quick
    traces(1 if quick else 5)
    trips(1 if quick else 5, 1000 if quick else 10_000, 10 if quick else 100)
