"""Nets that can only lie between others: where a balance holds nothing but elements through which current runs from the higher net to the
lower one, the net is no higher than the highest and no lower than the lowest of those it is joined to.

The no-gain property of resistors, diodes and transistors (A. N. Willson, IEEE Trans. CAS-22 (1975), from memory): whatever the gate
or base does, the current between drain and source, collector and emitter has the sign of their voltage. Followed from net to net it bounds
all of them by the nets that something else holds (a source, an amplifier) and by gnd. Nothing is rounded here: an element counts only
where its coefficients, as rational numbers, say so.

The argument: let M be the largest value among the nets of a set and M > U, U the largest bound among those that they are joined to outside.
In the balance of a net at M every term is >= 0, so each is 0, so every net joined to it is at M as well, and none is outside. So where a
net outside can be reached from each, M <= U.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.devices.phi import Kind
from loopsim.equations.system import System
from loopsim.numerics.enclosure import down, up

Array: TypeAlias = NDArray[np.float64]

GROUND = -1
RISING = frozenset({Kind.EXPONENTIAL, Kind.SATURATION, Kind.SOFTPLUS, Kind.CHARGE_SHEET, Kind.ARCTANGENT})
THROUGH_ZERO = frozenset({Kind.EXPONENTIAL, Kind.SATURATION, Kind.ARCTANGENT})
MOST_TERMS = 40  # in one balance: all pairs of them are compared
ONE_BY_ONE = 60  # nets up to which they leave a set one at a time, which keeps the most
ROOM = 1e-3  # [V] the bounds are widened by this, so that points on them lie inside

Link: TypeAlias = tuple[int, Fraction]  # (j, r): a term with the sign of x_i - r x_j; j may be GROUND


@dataclass(frozen=True, eq=False)
class Between:
    """A set of nets and what bounds them. members: (k,) unknowns; others: (l,) unknowns outside or GROUND; ratio: (l,) their factors."""

    members: NDArray[np.int64]
    others: NDArray[np.int64]
    ratio: Array

    def bounds(self, low: Array, high: Array) -> tuple[float, float]:
        """Least and greatest value of the members where the unknowns outside lie in [low, high]: (n,) each."""
        ends = np.zeros((2, len(self.others)))
        real = self.others != GROUND
        ends[0, real], ends[1, real] = low[self.others[real]], high[self.others[real]]
        # the ratio itself was rounded once, the product again
        products = np.concatenate([ends * self.ratio, ends])
        return float(down(products.min()) - ROOM), float(up(products.max()) + ROOM)


def held_between(system: System) -> tuple[Between, ...]:
    """The sets of nets that other nets hold between them."""
    chosen = _closed({i: _links(system, i) for i in range(system.n) if _plain_balance(system, i)})
    found = []
    for members in _sets(chosen):
        outside = sorted({link for i in members for link in chosen[i] if link[0] not in chosen})
        found.append(
            Between(
                np.array(sorted(members), dtype=np.int64),
                np.array([j for j, _ in outside], dtype=np.int64),
                np.array([float(ratio) for _, ratio in outside]),
            )
        )
    return tuple(found)


def _plain_balance(system: System, i: int) -> bool:
    """A net whose own row is its balance of currents, without a source in it."""
    return (
        system.unknowns[i][0] == "net"
        and len(system.row_units) == system.n
        and system.row_units[i] == "A"
        and system.s.ndim == 1
        and system.s[i] == 0.0
    )


def _links(system: System, i: int) -> list[Link] | None:
    """The terms of balance i as links; None where some term is of another kind."""
    linear = _linear_links(system, i)
    if linear is None or np.count_nonzero(system.B[i]) > MOST_TERMS:
        return None
    left = {int(k): Fraction(float(system.B[i, k])) for k in np.flatnonzero(system.B[i])}
    found = list(linear)
    for k in list(left):
        for l in list(left):
            if l > k and left.get(k, 0) * left.get(l, 0) < 0 and (link := _pair(system, i, k, l, left[k])) is not None:
                share = min(abs(left[k]), abs(left[l]))
                found.append(link)
                for row in (k, l):
                    left[row] -= share if left[row] > 0 else -share
    for k, weight in left.items():
        if weight:
            link = _alone(system, i, k, weight)
            if link is None:
                return None
            found.append(link)
    return found


def _linear_links(system: System, i: int) -> list[Link] | None:
    """Conductances to other nets, and to gnd what is left. A remainder below nil is rounding, and is given to the largest of them."""
    conductances = {int(j): -Fraction(float(system.G[i, j])) for j in np.flatnonzero(system.G[i]) if j != i}
    if any(g < 0 or system.unknowns[j][0] != "net" for j, g in conductances.items()):
        return None
    rest = Fraction(float(system.G[i, i])) - sum(conductances.values())
    if rest >= 0:
        return [(j, Fraction(1)) for j in conductances] + ([(GROUND, Fraction(1))] if rest else [])
    largest = max(conductances, key=lambda j: conductances[j], default=GROUND)
    if largest == GROUND or -rest > conductances[largest] / 10**9:
        return None
    # g (x_i - x_j) + rest x_i = (g + rest) (x_i - g / (g + rest) x_j)
    ratio = conductances[largest] / (conductances[largest] + rest)
    return [(j, ratio if j == largest else Fraction(1)) for j in conductances]


def _alone(system: System, i: int, k: int, weight: Fraction) -> Link | None:
    """weight phi_k(a x_i + b x_j), rising in x_i and nil where the sum is."""
    if int(system.kinds[k]) not in THROUGH_ZERO or system.c[k] != 0.0 or _is_product(system, k):
        return None
    return _link(i, {int(j): Fraction(float(system.W[k, j])) for j in np.flatnonzero(system.W[k])}, weight)


def _pair(system: System, i: int, k: int, l: int, weight: Fraction) -> Link | None:
    """weight (phi_k - phi_l) of one rising function: the sign is that of the difference of the two arguments."""
    if system.kinds[k] != system.kinds[l] or int(system.kinds[k]) not in RISING or system.c[k] != system.c[l]:
        return None
    if _is_product(system, k) or _is_product(system, l):
        return None
    columns = np.flatnonzero(system.W[k] != system.W[l])
    return _link(i, {int(j): Fraction(float(system.W[k, j])) - Fraction(float(system.W[l, j])) for j in columns}, weight)


def _link(i: int, lever: dict[int, Fraction], weight: Fraction) -> Link | None:
    own = lever.pop(i, Fraction(0))
    if own * weight <= 0 or len(lever) > 1:
        return None
    if not lever:
        return GROUND, Fraction(1)
    ((j, other),) = lever.items()
    return (j, -other / own) if -other / own > 0 else None


def _is_product(system: System, k: int) -> bool:
    return bool(np.any(system.V[k] != 0.0) or system.d[k] != 1.0)


def _closed(found: dict[int, list[Link] | None]) -> dict[int, list[Link]]:
    """The largest set of nets that the argument covers: links within it must be exact differences, and each must lead outside."""
    chosen = {i: links for i, links in found.items() if links}
    while True:
        bad = {i for i, links in chosen.items() if any(j in chosen and ratio != 1 for j, ratio in links)}
        reaching = {i for i, links in chosen.items() if any(j not in chosen for j, _ in links)}
        while grown := {i for i, links in chosen.items() if i not in reaching and any(j in reaching for j, _ in links)}:
            reaching |= grown
        bad |= chosen.keys() - reaching
        if not bad:
            return chosen
        # what leaves the set may hold the others from outside
        for i in bad if len(chosen) > ONE_BY_ONE else [max(bad)]:
            del chosen[i]


def _sets(chosen: dict[int, list[Link]]) -> list[set[int]]:
    """Members joined to each other, in either direction."""
    joined: dict[int, set[int]] = {i: set() for i in chosen}
    for i, links in chosen.items():
        for j, _ in links:
            if j in chosen:
                joined[i].add(j)
                joined[j].add(i)
    found: list[set[int]] = []
    left = set(chosen)
    while left:
        ready, members = [left.pop()], set()
        while ready:
            i = ready.pop()
            members.add(i)
            ready += [j for j in joined[i] if j in left]
            left -= joined[i]
        found.append(members)
    return found
