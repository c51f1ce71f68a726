"""Trip points over tolerances: where the folds of a characteristic lie for many samples of the parts, and how each value moves them.

The folds are found once, at the nominal values; then every sample's folds are solved together by Newton from there. A fold that only some
samples have, or a new one, is not looked for: this moves known trip points, it does not prove that there are no others.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.trace import trace
from loopsim.analyses.trace_results import Fold, Trace
from loopsim.circuit import Circuit
from loopsim.equations.assemble import assemble, is_affine, parameter_values, tolerance_limits
from loopsim.equations.condensed import arguments, condense, good_shift
from loopsim.equations.system import System
from loopsim.errors import AnalysisError, CircuitError
from loopsim.numerics.fold_batch import null_vectors, solve_folds

Array: TypeAlias = NDArray[np.float64]

STEP = 1e-6  # of a value: step of the differences that sensitivities are taken from, where their two errors balance
MANY = 4096  # samples solved together: memory stays small, and the fixed cost of array calls no longer counts


@dataclass(frozen=True, eq=False)
class TripPoints:
    """Folds over samples. parameters: names of what varies; samples: (k, p) their values [SI]; folds: nominal, in order of the let; at:
    (k, f) value of the let at each fold, NaN where Newton did not converge; sensitivities: (f, p) d at / d parameter at nominal."""

    circuit: str
    along: str
    unit: str
    parameters: tuple[str, ...]
    folds: tuple[Fold, ...]
    samples: Array
    at: Array
    sensitivities: Array
    nominal: Trace

    @property
    def lost(self) -> int:
        """Trip points that were not found."""
        return int(np.count_nonzero(np.isnan(self.at)))

    def threshold(self, net: str, direction: str) -> Array:
        """(k,) of the samples' rising or falling threshold of a net; KeyError for a net without one."""
        return np.asarray(self.at[:, self._position(net, direction)])

    def limits(self, net: str, direction: str) -> tuple[float, float]:
        """Smallest and largest of the samples: what sampling saw, no proof."""
        values = self.threshold(net, direction)
        return float(np.nanmin(values)), float(np.nanmax(values))

    def sensitivity(self, net: str, direction: str) -> dict[str, float]:
        """d threshold / d parameter [unit of the let per SI unit of the parameter], largest effect of a tolerance first."""
        row = self.sensitivities[self._position(net, direction)]
        effect = np.abs(row) * np.ptp(self.samples, axis=0) if len(self.samples) else np.abs(row)
        return {self.parameters[i]: float(row[i]) for i in np.argsort(-effect, kind="stable")}

    def _position(self, net: str, direction: str) -> int:
        value = getattr(self.nominal.thresholds(net), direction)
        if value is None:
            raise KeyError(f"{net} has no {direction} threshold")
        return min(range(len(self.folds)), key=lambda i: abs(self.folds[i].at - value))

    def __repr__(self) -> str:
        return f"TripPoints({self.circuit} along {self.along}: {len(self.folds)} folds, {len(self.samples)} samples)"

    def to_dict(self) -> dict[str, Any]:
        """Plain data; NaN is null in JSON."""
        return {
            "along": self.along, "unit": self.unit, "parameters": list(self.parameters), "samples": self.samples, "at": self.at,
            "nominal": [f.at for f in self.folds], "sensitivities": self.sensitivities, "lost": self.lost,
        }  # fmt: skip


def trip_points(
    circuit: Circuit,
    along: str,
    *,
    samples: int | Mapping[str, Sequence[float] | Array] = 1000,
    seed: int = 0,
    over: tuple[float, float] | None = None,
    watch: str | Sequence[str] | None = None,
    nominal: Trace | None = None,
    settings: Mapping[str, Any] | None = None,
) -> TripPoints:
    """Every fold along a let for samples of the toleranced values.

    samples: how many to draw, each value evenly between its limits and independent of the others; or the values themselves, name to (k,)
    [SI]. seed: of the draw. over, watch, settings: as for `trace`; nominal: a trace already made at `settings`. AnalysisError `no-fold`
    where the nominal characteristic has none, `not-a-source` for a let that moves more than sources; CircuitError for unknown names.
    """
    fixed = {k: v for k, v in (settings or {}).items() if k != along}
    if not is_affine(circuit, along):
        hint = "trip points are solved along a source; use trace for it"
        raise AnalysisError("not-a-source", f"`{along}` moves more than sources", hint=hint)
    curve = nominal or trace(circuit, along, over=over, watch=watch, range_budget=0.0, settings=fixed)
    if not curve.folds:
        raise AnalysisError("no-fold", f"{circuit.name} has no fold along `{along}`", hint="there is no trip point to move")
    values = _drawn(circuit, samples, seed, fixed) if isinstance(samples, int) else _given(circuit, samples)
    names = tuple(values)
    table = np.column_stack([values[name] for name in names]) if names else np.zeros((1, 0))
    system, _ = _line(circuit, along, curve.low, curve.high, fixed)
    shift = good_shift(system, curve.folds[0].x)
    rows = [_solved(circuit, curve, {**fixed, **dict(zip(names, part.T, strict=True))}, shift, len(part)) for part in _parts(table)]
    slopes = _sensitivities(circuit, curve, names, fixed)
    return TripPoints(circuit.name, along, curve.unit, names, curve.folds, table, np.concatenate(rows), slopes, curve)


def _drawn(circuit: Circuit, count: int, seed: int, fixed: Mapping[str, Any]) -> dict[str, Array]:
    """Evenly between the limits of each toleranced value."""
    if count < 1:
        raise ValueError(f"the number of samples has to be 1 or more, not {count}")
    random = np.random.default_rng(seed)
    return {name: random.uniform(low, high, count) for name, (low, high) in tolerance_limits(circuit, fixed).items()}


def _given(circuit: Circuit, samples: Mapping[str, Sequence[float] | Array]) -> dict[str, Array]:
    found = {name: np.asarray(values, dtype=float).reshape(-1) for name, values in samples.items()}
    for name in found:
        if name not in circuit.parameters:
            raise CircuitError("unknown-let", f"{circuit.name} has no let `{name}`")
    if len({len(values) for values in found.values()}) > 1:
        raise ValueError("the samples of all values have to be of one number")
    return found


def _parts(table: Array) -> list[Array]:
    return [table[i : i + MANY] for i in range(0, len(table), MANY)] or [table]


def _line(circuit: Circuit, along: str, low: float, high: float, settings: Mapping[str, Any]) -> tuple[System, Array]:
    """The system with s as of level 0, and ds/dlevel."""
    first, second = (assemble(circuit, {**settings, along: level}) for level in (low, high))
    rise = (second.s - first.s) / (high - low)
    return replace(first, s=first.s - low * rise), rise


def _solved(circuit: Circuit, curve: Trace, settings: Mapping[str, Any], shift: Array, count: int) -> Array:
    """(count, f) of one batch."""
    system, rise = _line(circuit, curve.along, curve.low, curve.high, settings)
    equations = condense(system, rise, shift, count)
    found = []
    for fold in curve.folds:
        start = np.array(np.broadcast_to(arguments(system, np.broadcast_to(fold.x, (count, system.n))), (count, equations.K.shape[1])))
        middle = start.mean(axis=0)
        here = np.full(count, fold.at)
        left, right = null_vectors(equations.jacobian(start, here).mean(axis=0))
        size = np.maximum(np.abs(middle), 1e-3 * max(float(np.max(np.abs(middle))), 1e-3))
        solved = solve_folds(equations, start, here, left, right, size, curve.high - curve.low)
        found.append(np.where(solved.converged, solved.level, np.nan))
    return np.column_stack(found)


def _sensitivities(circuit: Circuit, curve: Trace, names: Sequence[str], fixed: Mapping[str, Any]) -> Array:
    """d level / d p = -(u . F_p) / (u . F_level), u the left null vector at the nominal fold; F_p by central differences."""
    found = np.zeros((len(curve.folds), len(names)))
    nominal = parameter_values(circuit, fixed)
    system, rise = _line(circuit, curve.along, curve.low, curve.high, fixed)
    for f, fold in enumerate(curve.folds):
        jacobian = system.jacobian(fold.x)
        rows = 1.0 / np.maximum(np.max(np.abs(jacobian), axis=1), 1e-300)
        left, _ = null_vectors(rows[:, None] * jacobian)
        left = left * rows
        for i, name in enumerate(names):
            value = float(nominal[name])
            step = STEP * (abs(value) or 1.0)
            ends = [assemble(circuit, {**fixed, curve.along: fold.at, name: value + sign * step}).residual(fold.x) for sign in (1.0, -1.0)]
            found[f, i] = float(left @ (ends[0] - ends[1])) / (2.0 * step) / float(left @ rise)
    return found


__all__ = ["TripPoints", "trip_points"]
