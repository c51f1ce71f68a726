"""A requirement over tolerances, by corners: every quantity that has a tolerance at one of its limits or at its nominal value.

Up to a stated number of such quantities every combination of limits is tried. Beyond that each quantity is moved alone to both limits, and
the corners are those that the signs of these moves point to. Both are looks at points: where a measure has its worst inside the tolerances,
or moves both ways with a quantity, corners miss it. So the label is `by corners`, never `proved`.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

from loopsim.circuit import Circuit, Requirement
from loopsim.equations.assemble import dependence, tolerance_limits
from loopsim.errors import AnalysisError, CircuitError
from loopsim.requirements.computed import Computed, Settings
from loopsim.requirements.judged import Judged, open_question
from loopsim.requirements.oscillation import OSCILLATION
from loopsim.requirements.proof import CORNERS
from loopsim.requirements.settling import SETTLING

Corner = Mapping[str, float]
AtCorner = Callable[[Corner], Judged]

ALL_CORNERS = 7  # quantities: 128 combinations; a list of states takes about 10 ms
ALL_CORNERS_OF_FOLDS = 12  # 4096, solved together in a tenth of a second
ALL_CORNERS_IN_TIME = 4  # where each corner is a run in time
IN_TIME = (*OSCILLATION, *SETTLING)
AT_REST = ("states", "values", "slope")  # what no capacitance and no inductance moves
STORED = {"C"}  # the array that holds them


@dataclass(frozen=True)
class Plan:
    """Which corners are tried. limits: name to (smallest, largest) [SI]; corners: settings; words: for the note."""

    limits: Mapping[str, tuple[float, float]]
    corners: tuple[Corner, ...]
    words: str


def over_tolerances(
    computed: Computed,
    requirement: Requirement,
    settings: Settings,
    at_corner: AtCorner,
    *,
    most: int | None = None,
    prepare: Callable[[Sequence[Corner]], None] = lambda corners: None,
) -> Judged:
    """The worst over the corners.

    at_corner: judges the requirement with some quantities set, {} being the nominal circuit; prepare: is told the corners that will be
    asked for, so that they can be solved together; most: quantities up to which every combination is tried.
    """
    nominal = at_corner({})
    if nominal.outcome != "met":
        return nominal.at("nominal values")
    limits = loose(computed.circuit, requirement, settings)
    if not limits:
        return replace(nominal, note="nothing that moves it has a tolerance")
    tried: list[tuple[Corner, Judged]] = [({}, nominal)]
    try:
        if len(limits) <= (most or _most(requirement)):
            plan = every_corner(limits)
        else:
            prepare([{name: value} for name, pair in limits.items() for value in pair])
            plan = _chosen(limits, tried, at_corner)
        prepare(plan.corners)
        for corner in plan.corners:
            tried.append((corner, _judged(at_corner, corner)))  # one by one: what a spent budget cuts off must keep the rest
    except AnalysisError as error:
        return _cut_short(computed.circuit, tried, error)
    return _worst(computed.circuit, tried, plan.words)


def loose(circuit: Circuit, requirement: Requirement, settings: Settings) -> dict[str, tuple[float, float]]:
    """The quantities with a tolerance that can move the measure: name to limits [SI]. What is traced along is not one of them."""
    found = {}
    for name, (low, high) in tolerance_limits(circuit, settings).items():
        moves = dependence(circuit, name)
        still = not moves or (requirement.measure in AT_REST and moves <= STORED)
        if low < high and name != requirement.along and not still:
            found[name] = (low, high)
    return found


def every_corner(limits: Mapping[str, tuple[float, float]]) -> Plan:
    """All combinations of limits."""
    corners = tuple(dict(zip(limits, chosen, strict=True)) for chosen in itertools.product(*limits.values()))
    return Plan(limits, corners, f"all {len(corners)} corners of {_quantities(len(limits))}")


def _chosen(
    limits: Mapping[str, tuple[float, float]], tried: list[tuple[Corner, Judged]], at_corner: AtCorner
) -> Plan:
    """Corners by the signs of what each quantity does alone; those single moves are tried, too, and added to `tried`."""
    nominal = tried[0][1]
    alone: dict[str, tuple[Judged, Judged]] = {}
    for name, pair in limits.items():
        for value in pair:
            tried.append(({name: value}, _judged(at_corner, {name: value})))
        alone[name] = (tried[-2][1], tried[-1][1])
    corners: list[Corner] = []
    for i in range(max(1, len(nominal.measured))):
        ways = {name: _way(low, high, i) for name, (low, high) in alone.items()}
        for sign in (-1.0, 1.0):
            corner = {name: limits[name][1 if sign * ways[name] > 0.0 else 0] for name in limits}
            if corner not in corners:
                corners.append(corner)
    words = f"{_quantities(len(limits))}, each alone at both limits, and the {len(corners)} corners that these moves point to"
    return Plan(limits, tuple(corners), words)


def _way(low: Judged, high: Judged, i: int) -> float:
    """+1 or -1: whether measured value i rises with the quantity."""
    if len(low.measured) > i and len(high.measured) > i and high.measured[i] < low.measured[i]:
        return -1.0
    return 1.0


def _most(requirement: Requirement) -> int:
    return ALL_CORNERS_IN_TIME if requirement.measure in IN_TIME else ALL_CORNERS


def _judged(at_corner: AtCorner, corner: Corner) -> Judged:
    """One corner; only a spent budget ends the round."""
    try:
        return at_corner(corner)
    except AnalysisError as error:
        if error.code == "budget":
            raise
        return open_question(f"{error.code}: {error.message}")
    except CircuitError as error:
        return open_question(f"{error.code}: {error.message}")


def _worst(circuit: Circuit, tried: Sequence[tuple[Corner, Judged]], words: str) -> Judged:
    """One outcome for all of them: measured are the smallest and the largest value met anywhere."""
    corner, worst = min(tried, key=lambda entry: entry[1].badness)
    numbers = [value for _, judged in tried for value in judged.measured]
    measured = tuple(sorted({min(numbers), max(numbers)})) if numbers else ()
    where = place(circuit, corner)
    if worst.outcome == "met":
        least = f", least room at {where}" if worst.margin else ""
        return replace(worst, measured=measured, note=f"{words}{least}", proof=CORNERS)
    bad = sum(judged.outcome == worst.outcome for _, judged in tried)
    more = f" (and at {bad - 1} more of {len(tried)})" if bad > 1 else ""
    proof = CORNERS if worst.outcome == "violated" else ""
    return replace(worst, measured=measured, note=f"at {where}: {worst.note}{more}", proof=proof)


def _cut_short(circuit: Circuit, tried: Sequence[tuple[Corner, Judged]], error: AnalysisError) -> Judged:
    """What is known when the budget ends: a violated corner stands, all else is open."""
    if any(judged.outcome == "violated" for _, judged in tried):
        return _worst(circuit, tried, "")
    return open_question(f"{error.message}: {len(tried)} corners were met before that", tried[0][1].limits, tried[0][1].measured)


def place(circuit: Circuit, corner: Corner) -> str:
    """`supply = 9.09 V, r_top.value = 21780 ohm`."""
    if not corner:
        return "nominal values"
    units = {name: parameter.unit for name, parameter in circuit.parameters.items()}
    return ", ".join(f"{name} = {value:.6g} {units.get(name, '')}".rstrip() for name, value in corner.items())


def _quantities(count: int) -> str:
    return f"{count} quantit{'y' if count == 1 else 'ies'} with a tolerance"
