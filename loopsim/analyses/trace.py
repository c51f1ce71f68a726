"""The whole static characteristic over a let's range, through its folds, with what was proved about it.

States are proved at both ends and at stations between; from every one of them the curve is followed both ways; a proved state that lies on
no curve yet starts a new one (a closed loop between the ends is found that way). Folds are located by Newton on the fold equations, points
where a growing pair appears by the eigenvalues. For a let that is a quasi-static input, each jump is followed to where it lands. Last,
where the let only moves sources, the range is cut into pieces over which the proof itself covers every value of the let at once.
"""

from __future__ import annotations

import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.family import Family
from loopsim.analyses.points import Points, all_points
from loopsim.analyses.stability import STRAY, judge
from loopsim.analyses.states import watched
from loopsim.circuit import Circuit
from loopsim.equations.assemble import let_range, parameter_values
from loopsim.equations.structure import check
from loopsim.equations.system import System
from loopsim.errors import AnalysisError, CircuitError, InternalError
from loopsim.numerics.curve import Curve, fold, follow
from loopsim.numerics.newton import newton
from loopsim.numerics.spectrum import determinant_signs

Array: TypeAlias = NDArray[np.float64]

STATIONS = 9
SAME = 1e-6  # scaled distance at which a proved state and a point of a curve are one; both are known to 1e-9
PAST = 1e-7  # of the range: how far past a fold the landing is looked for
MOVES = 0.05  # of a net's travel over all branches: a jump that moves it by less is no jump of that net
SETTLE_STEPS = 400
GRADING = (
    1.8  # lengths of neighbouring pieces beside a fold: a tube at a distance d from it closes over about d
)
STEEPEST = 1e-7  # of the range: pieces without a fold are halved down to this; a gain of 1e5 needs 1e-6
TUBE_BOXES = (
    40  # a piece of the range that needs more boxes than its states' own proof took is halved instead
)
FINEST = 2e-4  # of the range: pieces of the range proof are not cut below this; folds lie in such gaps


@dataclass(frozen=True, eq=False)
class Branch:
    """One connected curve. values: (k,) of the let; x: (k, n); nets: name to (k,) volts; stable: (k,) True, False or None; lengths: (k,)
    arclength, scaled; closed: it comes back to its start."""

    values: Array
    x: Array
    nets: Mapping[str, Array]
    stable: tuple[bool | None, ...]
    lengths: Array
    closed: bool

    def to_dict(self, watch: Sequence[str]) -> dict[str, Any]:
        """The JSON form."""
        return {
            "values": self.values.tolist(),
            "nets": {net: self.nets[net].tolist() for net in watch if net in self.nets},
            "stable": list(self.stable),
            "arclength": self.lengths.tolist(),
            "closed": self.closed,
        }


@dataclass(frozen=True, eq=False)
class Fold:
    """A turning point. at: value of the let; nets: volts there; direction: "rising" where the curve ends for a rising let, else "falling";
    precision: of `at`, relative to the range; from_stable: one side of it is stable, so that a circuit can sit there until it jumps;
    lands: volts after the jump, None where there is none; landing: x there."""

    at: float
    nets: Mapping[str, float]
    direction: str
    precision: float
    from_stable: bool
    lands: Mapping[str, float] | None
    x: Array
    landing: Array | None = None
    branch: int = 0

    def to_dict(self) -> dict[str, Any]:
        """The JSON form."""
        return {
            "at": self.at, "nets": dict(self.nets), "direction": self.direction, "precision": self.precision,
            "from_stable": self.from_stable, "lands": dict(self.lands) if self.lands is not None else None,
        }  # fmt: skip


@dataclass(frozen=True, eq=False)
class Crossing:
    """Where the stability changes without a fold. kind: "hopf" (a pair of eigenvalues crosses: frequency [Hz]) or "branch point" (two
    branches cross). precision: relative to the range."""

    kind: str
    at: float
    nets: Mapping[str, float]
    frequency: float | None
    precision: float

    def to_dict(self) -> dict[str, Any]:
        """The JSON form."""
        return {
            "at": self.at,
            "nets": dict(self.nets),
            "frequency": self.frequency,
            "precision": self.precision,
        }


@dataclass(frozen=True, eq=False)
class Thresholds:
    """Values of the let at which a net jumps when the let rises slowly from the low end, falls slowly from the high end; hysteresis: their
    distance. None where it never jumps that way. all_rising, all_falling: every jump on the way."""

    rising: float | None
    falling: float | None
    all_rising: tuple[float, ...] = ()
    all_falling: tuple[float, ...] = ()

    @property
    def hysteresis(self) -> float | None:
        return self.rising - self.falling if self.rising is not None and self.falling is not None else None

    def to_dict(self) -> dict[str, Any]:
        """The JSON form."""
        return {"rising": self.rising, "falling": self.falling, "hysteresis": self.hysteresis}


@dataclass(frozen=True, eq=False)
class Trace:
    """The characteristic of a circuit along a let.

    complete_at: values of the let at which the states were proved complete and all lie on the branches. over_range: every value of the let
    was covered by the proof but for `gaps`, which are intervals around folds. notes: doubts.
    """

    circuit: str
    file: str | None
    along: str
    unit: str
    low: float
    high: float
    settings: Mapping[str, float]
    watch: tuple[str, ...]
    branches: tuple[Branch, ...]
    folds: tuple[Fold, ...]
    crossings: tuple[Crossing, ...]
    per_net: Mapping[str, Thresholds]
    counts: tuple[tuple[float, int], ...]
    complete_at: tuple[float, ...]
    stations: tuple[float, ...]
    over_range: bool
    gaps: tuple[tuple[float, float], ...]
    seconds: float
    notes: tuple[str, ...] = ()
    scale: Array = field(default_factory=lambda: np.zeros(0))

    @property
    def hopf(self) -> tuple[Crossing, ...]:
        """Points at which a growing oscillation appears or goes."""
        return tuple(c for c in self.crossings if c.kind == "hopf")

    @property
    def complete(self) -> bool:
        """Proved complete at both ends and at every station."""
        return len(self.complete_at) == len(self.stations)

    def thresholds(self, net: str) -> Thresholds:
        """Where a net jumps; KeyError for a net the circuit has not."""
        return self.per_net[net]

    def plot(self, path: str, nets: Sequence[str] = (), *, versus: str | None = None, overlay: Any = None) -> None:
        """Draw the nets (the watched ones) over the let, or over the net `versus`, into a file; the suffix decides: svg, png, pdf.

        overlay: measured points, as `loopsim.output.overlay.read_overlay` gives them. MissingExtra without matplotlib.
        """
        from loopsim.output.plots_trace import plot_trace

        plot_trace(self, path, tuple(nets), versus, overlay)

    def to_dataframe(self) -> Any:
        """One row a point: branch, arclength, the let, stable, then every net [V]. Needs pandas."""
        from loopsim.output.frames import trace_frame

        return trace_frame(self)

    def __repr__(self) -> str:
        return f"Trace({self.circuit} along {self.along}: {len(self.branches)} branches, {len(self.folds)} folds)"

    def __str__(self) -> str:
        """The answer as `loopsim trace` prints it."""
        from loopsim.output.trace_text import trace_text

        return trace_text(self).rstrip("\n")

    def _repr_html_(self) -> str:
        from html import escape

        return f"<pre>{escape(str(self))}</pre>"

    def to_dict(self) -> dict[str, Any]:
        """The JSON form, without the frame that every verb shares."""
        return {
            "along": self.along,
            "unit": self.unit,
            "range": [self.low, self.high],
            "branches": [branch.to_dict(self.watch) for branch in self.branches],
            "folds": [found.to_dict() for found in self.folds],
            "hopf": [c.to_dict() for c in self.hopf],
            "branch_points": [c.to_dict() for c in self.crossings if c.kind == "branch point"],
            "thresholds": {net: self.per_net[net].to_dict() for net in self.watch if net in self.per_net},
            "complete_at": list(self.complete_at),
            "stations": list(self.stations),
            "over_range": self.over_range,
            "gaps": [list(gap) for gap in self.gaps],
            "seconds": self.seconds,
            "notes": list(self.notes),
        }


def trace(
    circuit: Circuit,
    along: str,
    *,
    over: tuple[float, float] | None = None,
    watch: str | Sequence[str] | None = None,
    stations: int = STATIONS,
    box: float = 1e3,
    budget: float = 60.0,
    range_budget: float = 10.0,
    settings: Mapping[str, Any] | None = None,
) -> Trace:
    """The static characteristic along a let.

    over: range [SI of the let], by default the one it was given with `in`. watch: nets of interest. stations: values between the ends at
    which the states are proved. budget: wall time [s]; range_budget: what of it the proof over the range may take, 0 to leave that out.
    CircuitError for an unknown let or net, or a let without a range.
    """
    began = time.monotonic()
    deadline = began + budget
    check(circuit)
    low, high = _range(circuit, along, over, settings)
    family = Family(circuit, {k: v for k, v in (settings or {}).items() if k != along}, along, low, high)
    nets = _watch(circuit, watch)
    values = np.linspace(low, high, stations + 2)
    proved = [all_points(family.system(float(v)), box, deadline) for v in values]
    scale = _scale(family, proved, high - low)
    curves = _curves(family, values, proved, scale, deadline)
    branches, index = (
        [],
        {name: j for j, (kind, name) in enumerate(family.system(low).unknowns) if kind == "net"},
    )
    for curve in curves:
        branches.append(_branch(family, curve, index))
    matched, notes = _matched(family, branches, values, proved, scale)
    folds = _folds(family, branches, index, scale, box, deadline)
    crossings = _crossings(family, branches, index, scale)
    travel = {net: _travel(branches, net) for net in index}
    per_net = _thresholds(family, branches, folds, travel, scale)
    over_range, gaps = _prove_range(
        family, values, proved, folds, box, min(deadline, time.monotonic() + range_budget)
    )
    parameter = circuit.parameters[along]
    return Trace(
        circuit.name, circuit.file, along, parameter.unit, low, high,
        {name: float(v) for name, v in parameter_values(circuit, settings).items()}, nets, tuple(branches), folds, crossings, per_net,
        tuple((float(v), len(p.x)) for v, p in zip(values, proved, strict=True)), tuple(float(v) for v in matched),
        tuple(float(v) for v in values), over_range, gaps, time.monotonic() - began, tuple(notes), scale,
    )  # fmt: skip


def _range(
    circuit: Circuit, along: str, over: tuple[float, float] | None, settings: Mapping[str, Any] | None
) -> tuple[float, float]:
    found = over if over is not None else let_range(circuit, along, settings)
    if found is None:
        parameter = circuit.parameters[along]
        raise CircuitError(
            "let-range",
            f"the let `{along}` has no range",
            parameter.span,
            f"write `let {along} = ... in LO .. HI`, or give one",
        )
    low, high = float(found[0]), float(found[1])
    if not (np.isfinite(low) and np.isfinite(high) and low < high):
        raise CircuitError("let-range", f"the range of `{along}` has to rise, not {low:g} .. {high:g}")
    return low, high


def _watch(circuit: Circuit, watch: str | Sequence[str] | None) -> tuple[str, ...]:
    if watch is None:
        return watched(circuit)
    nets = (watch,) if isinstance(watch, str) else tuple(watch)
    for net in nets:
        if net not in circuit.nets:
            raise CircuitError("unknown-net", f"{circuit.name} has no net `{net}`")
    return nets


def _scale(family: Family, proved: Sequence[Points], width: float) -> Array:
    """Size of each unknown over all proved states, and of the let: its range."""
    known = np.concatenate([p.x for p in proved if len(p.x)] or [np.ones((1, family.system(family.low).n))])
    size = np.maximum(np.ptp(known, axis=0), 0.1 * np.max(np.abs(known), axis=0))
    nets = np.array([kind == "net" for kind, _ in family.system(family.low).unknowns])
    floor = np.where(nets, 1e-2 * max(float(np.max(size[nets], initial=0.0)), 1e-3), 1e-12)
    return np.append(np.maximum(size, floor), width)


def _curves(
    family: Family, values: Array, proved: Sequence[Points], scale: Array, deadline: float
) -> list[Curve]:
    """Every curve through a proved state, each once, ends joined: from low or from an inner start to both of its ends."""
    curves: list[Curve] = []
    order = [0, len(values) - 1, *range(1, len(values) - 1)]
    for station in order:
        value = float(values[station])
        for x in proved[station].x:
            if any(_passes(family, curve, x, value, scale) for curve in curves):
                continue
            if time.monotonic() > deadline:
                return curves
            # from an end of the range only the way inward is wanted
            outward = 1.0 if station == len(values) - 1 else -1.0
            inward = follow(family, x, value, -outward, family.low, family.high, scale, deadline)
            if inward.end == "closed" or station in (0, len(values) - 1):
                curves.append(inward)
                continue
            curves.append(
                _joined(follow(family, x, value, outward, family.low, family.high, scale, deadline), inward)
            )
    return [_cut(family, curve, scale) for curve in curves]


def _joined(back: Curve, ahead: Curve) -> Curve:
    """One curve from the end of `back` through its start to the end of `ahead`."""
    lengths = np.concatenate([-back.length[::-1], ahead.length[1:]])
    return Curve(
        np.concatenate([back.x[::-1], ahead.x[1:]]),
        np.concatenate([back.level[::-1], ahead.level[1:]]),
        np.concatenate([-back.tangent[::-1], ahead.tangent[1:]]),
        lengths - lengths[0],
        ahead.end
        if ahead.end in ("stuck", "time")
        else back.end
        if back.end in ("stuck", "time")
        else "range",
    )


def _cut(family: Family, curve: Curve, scale: Array) -> Curve:
    """End points that lie beyond the range moved onto its ends."""
    x, level = curve.x.copy(), curve.level.copy()
    for end, inner in ((0, 1), (len(level) - 1, len(level) - 2)):
        if len(level) > 1 and not family.low <= level[end] <= family.high:
            limit = family.low if level[end] < family.low else family.high
            share = (limit - level[inner]) / (level[end] - level[inner])
            moved = _at(family, x[inner] + share * (x[end] - x[inner]), limit)
            if moved is not None:
                x[end], level[end] = moved, limit
    return Curve(x, level, curve.tangent, curve.length, curve.end)


def _at(family: Family, x: Array, level: float) -> Array | None:
    """The state at a value of the let near x."""
    system = family.system(level)
    root = newton(system.residual, system.jacobian, x[None], max_steps=30)
    return root.x[0] if root.converged[0] else None


def _crossings_of(family: Family, curve: Curve | Branch, value: float) -> list[Array]:
    """States of a curve at a value of the let, refined."""
    level = curve.level if isinstance(curve, Curve) else curve.values
    d = level - value
    found = []
    for i in np.flatnonzero((d[:-1] * d[1:] < 0.0) | (d[:-1] == 0.0)):
        share = 0.0 if d[i] == d[i + 1] else d[i] / (d[i] - d[i + 1])
        x = _at(family, curve.x[i] + share * (curve.x[i + 1] - curve.x[i]), value)
        if x is not None:
            found.append(x)
    if len(d) and d[-1] == 0.0:
        found.append(curve.x[-1])
    return found


def _passes(family: Family, curve: Curve, x: Array, value: float, scale: Array) -> bool:
    return any(float(np.max(np.abs(y - x) / scale[:-1])) < SAME for y in _crossings_of(family, curve, value))


def _branch(family: Family, curve: Curve, index: Mapping[str, int]) -> Branch:
    nets = {net: curve.x[:, j] for net, j in index.items()}
    return Branch(
        curve.level,
        curve.x,
        nets,
        _stabilities(family, curve.level, curve.x),
        curve.length,
        curve.end == "closed",
    )


def _stabilities(family: Family, levels: Array, x: Array) -> tuple[bool | None, ...]:
    if family.affine:
        return tuple(v.stable for v in judge(family.system(float(levels[0])), x))
    return tuple(
        judge(family.system(float(level)), here[None])[0].stable
        for level, here in zip(levels, x, strict=True)
    )


def _matched(
    family: Family, branches: Sequence[Branch], values: Array, proved: Sequence[Points], scale: Array
) -> tuple[list[float], list[str]]:
    """Values at which the proof was complete and every proved state lies on a branch, and the other way round."""
    good: list[float] = []
    notes: list[str] = []
    for value, points in zip(values, proved, strict=True):
        crossings = [x for branch in branches for x in _crossings_of(family, branch, float(value))]
        missing = sum(all(np.max(np.abs(y - x) / scale[:-1]) >= SAME for y in crossings) for x in points.x)
        extra = [y for y in crossings if all(np.max(np.abs(y - x) / scale[:-1]) >= SAME for x in points.x)]
        if extra and points.complete and _really_there(family, extra[0], float(value)):
            raise InternalError(
                f"the curve passes a state at {value:g} that the proof of completeness excluded; please report this"
            )
        if missing:
            notes.append(f"{missing} proved states at {value:.6g} lie on no branch that could be followed")
        elif points.complete:
            good.append(float(value))
        else:
            notes.append(f"not complete at {value:.6g}: {'; '.join(points.remainder) or 'undecided'}")
    return good, notes


def _really_there(family: Family, x: Array, value: float) -> bool:
    from loopsim.analyses.states import whole_problem
    from loopsim.numerics.prune import certify

    return bool(certify(whole_problem(family.system(value)), x[None]).good[0])


def _folds(
    family: Family,
    branches: Sequence[Branch],
    index: Mapping[str, int],
    scale: Array,
    box: float,
    deadline: float,
) -> tuple[Fold, ...]:
    found: list[Fold] = []
    for number, branch in enumerate(branches):
        turns = np.flatnonzero(np.diff(np.sign(np.diff(branch.values))) != 0) + 1
        if (
            branch.closed
            and len(branch.values) > 3
            and (branch.values[1] - branch.values[0]) * (branch.values[-1] - branch.values[-2]) < 0
        ):
            turns = np.append(turns, 0)
        for i in turns:
            before, after = (i - 1, i + 1) if i else (len(branch.values) - 2, 1)
            direction = branch.x[after] - branch.x[before]
            point = fold(
                family,
                family.bend,
                family.slope_along,
                branch.x[i],
                float(branch.values[i]),
                direction,
                scale,
            )
            if point is None or abs(point.level - branch.values[i]) > 0.1 * scale[-1]:
                continue
            rising = bool(branch.values[before] < branch.values[i]) or bool(
                branch.values[i] > branch.values[after]
            )
            sides = (branch.stable[before], branch.stable[after])
            found.append(
                _landed(
                    family, point.x, point.level, point.precision, rising, sides, index, number, box, deadline
                )
            )
    return tuple(sorted(found, key=lambda f: (f.at, f.branch)))


def _landed(
    family: Family, x: Array, level: float, precision: float, rising: bool, sides: tuple[bool | None, bool | None],
    index: Mapping[str, int], branch: int, box: float, deadline: float,
) -> Fold:  # fmt: skip
    nets = {net: float(x[j]) for net, j in index.items()}
    from_stable = True in sides
    landing = None
    past = level + (1.0 if rising else -1.0) * PAST * (family.high - family.low)
    if from_stable and family.low <= past <= family.high:
        landing = settle(family.system(past), x)
    lands = {net: float(landing[j]) for net, j in index.items()} if landing is not None else None
    return Fold(
        level, nets, "rising" if rising else "falling", precision, from_stable, lands, x, landing, branch
    )


def settle(system: System, x: Array) -> Array | None:
    """Where the circuit comes to rest from x with its own dynamics (and a stray on each net that has none); None when it does not.

    Implicit Euler with growing steps: it damps what the circuit damps, and the steps end as Newton's on the equilibrium.
    """
    dynamics = system.C.copy()
    for j, (kind, _) in enumerate(system.unknowns):
        if (
            kind != "current"
            and not np.any(system.C[:, j] != 0.0)
            and (not system.row_units or system.row_units[j] == "A")
        ):
            dynamics[j, j] += STRAY
    h, y = 1e-13, x
    for _ in range(SETTLE_STEPS):
        mass = dynamics / h

        def residual(z: Array, mass: Array = mass, y: Array = y) -> Array:
            return system.residual(z) + (z - y) @ mass.T

        def jacobian(z: Array, mass: Array = mass) -> Array:
            return system.jacobian(z) + mass

        root = newton(residual, jacobian, y[None], max_steps=12)
        if not root.converged[0]:
            h *= 0.25
            if h < 1e-20:
                return None
            continue
        moved = float(np.max(np.abs(root.x[0] - y) / (1.0 + np.abs(y))))
        y = root.x[0]
        # growth near the fold is slow and must be let develop: the step grows only while the state moves little per step
        h *= 3.0 if moved < 0.05 else 1.0 if moved < 0.3 else 0.5
        if h > 1e6 and moved < 1e-9:
            final = newton(system.residual, system.jacobian, y[None], max_steps=20)
            return final.x[0] if final.converged[0] else None
    return None


def _crossings(
    family: Family, branches: Sequence[Branch], index: Mapping[str, int], scale: Array
) -> tuple[Crossing, ...]:
    """Stability changes between neighbouring points of a branch where the let does not turn."""
    found: list[Crossing] = []
    for branch in branches:
        for i in range(len(branch.values) - 1):
            a, b = branch.stable[i], branch.stable[i + 1]
            if a is None or b is None or a == b:
                continue
            turning = any(
                0 < k < len(branch.values) - 1
                and (branch.values[k] - branch.values[k - 1]) * (branch.values[k + 1] - branch.values[k]) <= 0
                for k in (i, i + 1)
            )
            if turning:
                continue
            located = _locate(family, branch, i, index, scale)
            if located is not None:
                found.append(located)
    return tuple(found)


def _locate(
    family: Family, branch: Branch, i: int, index: Mapping[str, int], scale: Array
) -> Crossing | None:
    """The change between points i and i + 1, by bisection on the largest real part along the let."""
    lo, hi = float(branch.values[i]), float(branch.values[i + 1])
    x_lo, x_hi = branch.x[i], branch.x[i + 1]
    if lo == hi:
        return None
    growth_lo = judge(family.system(lo), x_lo[None])[0].growth_rate
    growth_hi = judge(family.system(hi), x_hi[None])[0].growth_rate
    if growth_lo is None or growth_hi is None or growth_lo * growth_hi > 0.0:
        return None
    frequency = None
    for _ in range(80):
        # false position, kept inside by bisection (Illinois rule)
        middle = 0.5 * (lo + hi) if _ % 3 == 2 else lo + (hi - lo) * growth_lo / (growth_lo - growth_hi)
        x = _at(family, x_lo + (x_hi - x_lo) * (middle - lo) / (hi - lo), middle)
        if x is None:
            break
        verdict = judge(family.system(middle), x[None])[0]
        growth = verdict.growth_rate or 0.0
        values = verdict.eigenvalues
        frequency = abs(float(values[0].imag)) / (2.0 * np.pi) if len(values) else None
        if growth * growth_lo > 0.0:
            lo, x_lo, growth_lo = middle, x, growth
        else:
            hi, x_hi, growth_hi = middle, x, growth
        if abs(hi - lo) < 1e-11 * scale[-1] or growth == 0.0:
            break
    signs = determinant_signs(
        np.stack(
            [
                family.jacobian(branch.x[i], float(branch.values[i])),
                family.jacobian(branch.x[i + 1], float(branch.values[i + 1])),
            ]
        )
    )
    kind = "branch point" if signs[0] * signs[1] < 0 else "hopf"
    nets = {net: float(x_lo[j]) for net, j in index.items()}
    return Crossing(
        kind, 0.5 * (lo + hi), nets, frequency if kind == "hopf" else None, abs(hi - lo) / scale[-1]
    )


def _travel(branches: Sequence[Branch], net: str) -> float:
    if not branches:
        return 0.0
    return max(float(b.nets[net].max()) for b in branches) - min(float(b.nets[net].min()) for b in branches)


def _thresholds(
    family: Family,
    branches: Sequence[Branch],
    folds: Sequence[Fold],
    travel: Mapping[str, float],
    scale: Array,
) -> dict[str, Thresholds]:
    up = _slow_ride(family, branches, folds, scale, 1.0)
    down = _slow_ride(family, branches, folds, scale, -1.0)
    found = {}
    for net in travel:
        rising = tuple(f.at for f in up if _jumps(f, net, travel[net]))
        falling = tuple(f.at for f in down if _jumps(f, net, travel[net]))
        found[net] = Thresholds(
            rising[0] if rising else None, falling[0] if falling else None, rising, falling
        )
    return found


def _jumps(found: Fold, net: str, travel: float) -> bool:
    return found.lands is not None and abs(found.lands[net] - found.nets[net]) > MOVES * travel


def _slow_ride(
    family: Family, branches: Sequence[Branch], folds: Sequence[Fold], scale: Array, way: float
) -> list[Fold]:
    """The jumps met when the let moves slowly from one end to the other, from every stable state at the first end."""
    begin = family.low if way > 0 else family.high
    met: list[Fold] = []
    starts = [
        (number, k)
        for number, branch in enumerate(branches)
        for k in (0, len(branch.values) - 1)
        if not branch.closed and branch.values[k] == begin and branch.stable[k]
    ]
    for number, k in starts:
        place: tuple[int, int] | None = (number, k)
        for _ in range(len(folds) + 1):
            if place is None:
                break
            jump = _next_fold(branches, folds, place, way)
            if jump is None:
                break
            if all(jump is not f for f in met):
                met.append(jump)
            place = _nearest(branches, jump.landing, jump.at, scale) if jump.landing is not None else None
    return sorted(met, key=lambda f: way * f.at)


def _next_fold(
    branches: Sequence[Branch], folds: Sequence[Fold], place: tuple[int, int], way: float
) -> Fold | None:
    """The fold that ends a ride from a point of a branch; None where the ride leaves the range or loses stability first."""
    number, k = place
    branch = branches[number]
    count = len(branch.values)
    ahead = k + 1 if k + 1 < count else (1 if branch.closed else k)
    behind = k - 1 if k > 0 else (count - 2 if branch.closed else k)
    step = 1 if ahead != k and (branch.values[ahead] - branch.values[k]) * way > 0.0 else -1
    if step == -1 and (behind == k or (branch.values[behind] - branch.values[k]) * way <= 0.0):
        # the point itself is a turn
        here = [
            f for f in folds if f.branch == number and abs(f.at - branch.values[k]) < 1e-6 * (abs(f.at) + 1.0)
        ]
        return here[0] if here else None
    wanted = "rising" if way > 0 else "falling"
    for _ in range(count):
        following = k + step
        if following < 0 or following >= count:
            if not branch.closed:
                return None
            following = 1 if step > 0 else count - 2
        if (branch.values[following] - branch.values[k]) * way < 0.0:
            near = [f for f in folds if f.branch == number and f.direction == wanted]
            return min(near, key=lambda f: float(np.max(np.abs(f.x - branch.x[k]))), default=None)
        k = following
        if branch.stable[k] is False:
            near = [f for f in folds if f.branch == number and f.direction == wanted and f.from_stable]
            close = [
                f
                for f in near
                if way * (f.at - branch.values[k]) >= -1e-9 * (1.0 + abs(f.at))
                and abs(f.at - branch.values[k]) < 1e-3 * (abs(f.at) + 1.0)
            ]
            return min(close, key=lambda f: float(np.max(np.abs(f.x - branch.x[k]))), default=None)
    return None


def _nearest(branches: Sequence[Branch], x: Array, value: float, scale: Array) -> tuple[int, int] | None:
    best, place = np.inf, None
    for number, branch in enumerate(branches):
        away = np.max(np.abs(branch.x - x) / scale[:-1], axis=1) + np.abs(branch.values - value) / scale[-1]
        stable = np.array([s is not False for s in branch.stable])
        away = np.where(stable, away, np.inf)
        k = int(np.argmin(away))
        if away[k] < best:
            best, place = float(away[k]), (number, k)
    return place


def _prove_range(
    family: Family,
    values: Array,
    proved: Sequence[Points],
    folds: Sequence[Fold],
    box: float,
    deadline: float,
) -> tuple[bool, tuple[tuple[float, float], ...]]:
    """Pieces of the range over which the proof covers every value of the let at once; (all but gaps at folds, those gaps).

    Over a piece the sources are intervals; each solution found is a tube with exactly one state for each value. Near a fold no tube closes:
    pieces are halved down to FINEST, what is then left must hold a located fold.
    """
    if not family.affine or not all(p.complete for p in proved):
        return False, ()
    width = family.high - family.low
    half_gap = 0.5 * FINEST * width
    cuts = {float(v) for v in values}
    for f in folds:
        reach = half_gap
        while reach < width:
            cuts |= {f.at - reach, f.at + reach}
            reach *= GRADING
    edges = sorted(c for c in cuts if family.low <= c <= family.high)
    waiting = [(a, b) for a, b in pairwise(edges) if b > a][::-1]
    gaps: list[tuple[float, float]] = []
    while waiting:
        low, high = waiting.pop()
        if time.monotonic() > deadline:
            return False, ()
        at_fold = high - low < 1.5 * FINEST * width and any(low <= f.at <= high for f in folds)
        if not at_fold and high - low < 0.26 * width:
            system, half = family.source_interval(low, high)
            if _tubes(system, half, box, deadline):
                continue
        if at_fold or high - low < STEEPEST * width:
            if gaps and abs(gaps[-1][1] - low) < 1e-12 * width:
                gaps[-1] = (gaps[-1][0], high)
            else:
                gaps.append((low, high))
            continue
        middle = 0.5 * (low + high)
        waiting += [(middle, high), (low, middle)]
    for low, high in gaps:
        if not any(low - FINEST * width <= f.at <= high + FINEST * width for f in folds):
            return False, tuple(gaps)
    return True, tuple(gaps)


def _tubes(system: System, half: Array, box: float, deadline: float) -> bool:
    try:
        return all_points(system, box, deadline, half, TUBE_BOXES).complete
    except AnalysisError:
        return False


__all__ = ["STATIONS", "Branch", "Crossing", "Fold", "Thresholds", "Trace", "settle", "trace"]
