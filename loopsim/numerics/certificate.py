"""Uniqueness by the regularity of every slope matrix over a box, existence by Krawczyk's operator (A. Neumaier, Interval Methods
for Systems of Equations, 1990, ch. 5, from memory)."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.numerics.boxes import Boxes, boxes_about, boxes_over
from loopsim.numerics.enclosure import TINY, UNIT, gamma, middle, multiply, radius, up
from loopsim.numerics.newton import newton
from loopsim.numerics.problem import Problem
from loopsim.numerics.relaxation import invert, times

Array: TypeAlias = NDArray[np.float64]

NEWTON_STEPS = 12  # from the middle of a box on which the slope matrices are all regular, 4 to 9 were seen
INFLATIONS = 12  # Krawczyk with growing boxes: 1 to 3 were seen where it succeeds


def injective(problem: Problem, boxes: Boxes) -> NDArray[np.bool_]:
    """(b,) whether the equations are one to one over {x: W x + c in [w], V x + d in [u], phi in [f]}.

    The difference of two values is J (x1 - x2), J = G + B (diag(a) W + diag(f) V) with a in the slope range times u, because every row is
    scalar. All such J are regular when a positive vector is shrunk by the bound of I - N J (Neumaier 1990, from memory).
    """
    n, m = problem.n, problem.m
    g, b, w, v = problem.magnitudes
    at = problem.layout
    a_low, a_high = problem.rows.slope_bounds(boxes.low[:, at.w], boxes.high[:, at.w])
    q = problem.product
    f = np.zeros_like(a_low)
    fr = np.zeros_like(a_low)
    if len(q):
        a_low, a_high = a_low.copy(), a_high.copy()
        a_low[:, q], a_high[:, q] = multiply(
            a_low[:, q], a_high[:, q], boxes.low[:, at.u], boxes.high[:, at.u]
        )
        f[:, q] = middle(boxes.low[:, at.f], boxes.high[:, at.f])
        fr[:, q] = radius(boxes.low[:, at.f], boxes.high[:, at.f], f[:, q])
    a = middle(a_low, a_high)
    ar = radius(a_low, a_high, a)
    slope = a[..., None] * problem.W + (f[..., None] * problem.V if len(q) else 0.0)
    matrix = problem.G + problem.B @ slope
    inverse = invert(matrix)
    error = np.abs(np.eye(n) - inverse @ matrix)
    through = np.abs(inverse @ problem.B)
    k = n + 2 * m + 8
    size_n = np.abs(inverse)
    # magnitudes of everything that was multiplied, for the rounding of N, M and N B
    size = g + b @ (np.abs(slope) + ar[..., None] * w + fr[..., None] * v)
    loose = error + (size_n @ size) * (3.0 * gamma(k))
    w_through = np.abs(problem.W @ (inverse @ problem.B)) + (w @ (size_n @ b)) * gamma(k)
    v_through = np.abs(problem.V @ (inverse @ problem.B)) + (v @ (size_n @ b)) * gamma(k) if len(q) else None
    scales = np.maximum(times(through, ar + fr) + 1e-30, 1e-30)
    y = np.ones_like(a)
    yv = np.ones_like(a)
    z = scales
    for _ in range(6):
        load = ar * y + fr * yv
        y = times(w_through, load) + 1e-14 * (y + times(w, z))
        top = np.maximum(np.max(y, axis=1, keepdims=True, initial=0.0), TINY)
        y = y / top + 1e-12
        if v_through is not None:
            yv = times(v_through, load) / top + 1e-12
        z = times(through, ar * y + fr * yv) * 1.01 + 1e-13 * (1.0 + scales)
    # test the vector (z, y, yv) itself
    load = ar * y + fr * yv
    slack = times(loose, z)
    image_z = times(through, load) + slack + times(size_n @ b, load) * gamma(k)
    image_y = times(w_through, load) + times(w, slack)
    good = np.all(image_z * (1.0 + 8 * gamma(k)) < z, axis=1) & np.all(
        image_y * (1.0 + 8 * gamma(k)) < y, axis=1
    )
    if v_through is not None:
        image_v = times(v_through, load) + times(v, slack)
        good &= np.all(image_v * (1.0 + 8 * gamma(k)) < yv, axis=1)
    good &= np.any(inverse != 0.0, axis=(1, 2))
    if problem.passive is not None:
        least, losses = problem.passive
        good |= (a_low >= 0.0).all(axis=1) & (np.maximum(a_high, 0.0) @ losses * (1.0 + 1e-9) < least)
    return np.asarray(good)


@dataclass(frozen=True, eq=False)
class Certified:
    """Points with proof of existence: good: (b,); x: (b, n) centre; spread: (b, n) half widths within which one solution lies; row_spread:
    (b, m) and factor_spread: (b, q) the same of w and of u of the product rows, with what cancels in a difference of x left out."""

    good: NDArray[np.bool_]
    x: Array
    spread: Array
    row_spread: Array
    factor_spread: Array

    def boxes(self, problem: Problem) -> Boxes:
        """The sets that were mapped into themselves, with everything that follows from them."""
        return boxes_about(problem, self.x, self.spread, self.row_spread, self.factor_spread)


def newton_points(problem: Problem, x: Array) -> Array:
    """Plain Newton from every row of x with the centres of c, d, s; rows that leave the numbers come back as they are."""
    c, _, d, _, s, _ = problem.centres
    has_product = len(problem.product) > 0
    for _ in range(NEWTON_STEPS):
        w = times(problem.W, x) + c
        value, slope = problem.rows.value(w), problem.rows.slope(w)
        inner = value
        lines = slope[..., None] * problem.W
        if has_product:
            u = times(problem.V, x) + d
            inner = value * u
            lines = (slope * u)[..., None] * problem.W + value[..., None] * problem.V
        residual = times(problem.G, x) + times(problem.B, inner) - s
        step = times(invert(problem.G + problem.B @ lines), residual)
        step = np.where(np.isfinite(step), step, 0.0)
        x = x - step
        if np.all(np.abs(step) <= 1e-15 * np.abs(x) + 1e-300):
            break
    return x


def damped_points(problem: Problem, start: Array) -> Array:
    """Damped Newton from each start, for boxes proved one to one on which plain Newton did not settle. (b, n), NaN-free."""
    c, _, d, _, s, _ = problem.centres
    has_product = len(problem.product) > 0

    def parts(x: Array) -> tuple[Array, Array]:
        w = times(problem.W, x) + c
        return w, times(problem.V, x) + d if has_product else np.ones_like(w)

    def residual(x: Array) -> Array:
        w, u = parts(x)
        return times(problem.G, x) + times(problem.B, problem.rows.value(w) * u) - s

    def jacobian(x: Array) -> Array:
        w, u = parts(x)
        lines = (problem.rows.slope(w) * u)[..., None] * problem.W
        if has_product:
            lines = lines + problem.rows.value(w)[..., None] * problem.V
        return np.asarray(problem.G + problem.B @ lines)

    return newton(residual, jacobian, start).x


def certify(problem: Problem, x: Array) -> Certified:
    """Existence by Krawczyk: the set |x' - x| <= spread, |W (x' - x)| <= row_spread, |V (x' - x)| <= factor_spread, which is convex, is
    mapped into itself by x - N F + (I - N J)(x' - x).

    Bounds of w of their own keep what cancels in a difference of two unknowns that move together.
    """
    n, m = problem.n, problem.m
    g, b, w, v = problem.magnitudes
    q = problem.product
    v = v[q]
    size_x = np.abs(x)
    at = problem.layout
    here = boxes_over(problem, x, x)
    p_mid = middle(here.low[:, at.p], here.high[:, at.p])
    p_rad = radius(here.low[:, at.p], here.high[:, at.p], p_mid)
    _, _, _, _, s, s_rad = problem.centres
    k = n + 2 * m + 8
    residual = times(problem.G, x) + times(problem.B, p_mid) - s
    rounding = (times(g, size_x) + times(b, np.abs(p_mid)) + np.abs(s)) * gamma(k)
    a = problem.rows.slope(middle(here.low[:, at.w], here.high[:, at.w])) if m else np.zeros((len(x), 0))
    f = np.zeros_like(a)
    if len(q):
        u = np.ones_like(a)
        u[:, q] = middle(here.low[:, at.u], here.high[:, at.u])
        f[:, q] = middle(here.low[:, at.f], here.high[:, at.f])
        a = a * u
    lines = a[..., None] * problem.W + (f[..., None] * problem.V if len(q) else 0.0)
    matrix = problem.G + problem.B @ lines
    inverse = invert(matrix)
    size_n = np.abs(inverse)
    through = inverse @ problem.B
    size_b = times(b, p_rad)
    # what the rounding of N, of the residual and of their products can do, x by x
    inexact = times(size_n, rounding + (np.abs(residual) + size_b + s_rad) * gamma(k))
    floor = np.maximum(size_x * (2.0 * UNIT), TINY)
    # x itself, then W x and V x, whose rows are multiplied into N before any magnitude is taken
    views = [
        (inverse, through, np.eye(n)),
        (problem.W @ inverse, problem.W @ through, w),
        (problem.V[q] @ inverse, problem.V[q] @ through, v),
    ]
    sizes = [np.abs(t) for _, t, _ in views]
    shifts = []
    for (rows, _, own), size in zip(views, sizes, strict=True):
        moved = np.abs(times(rows, residual)) + times(size, p_rad) + times(np.abs(rows), s_rad) + times(own, inexact)
        shifts.append(up(moved * (1.0 + gamma(k))) + times(own, floor) + TINY)
    spreads = [shift * 2.0 for shift in shifts]
    good = np.zeros(len(x), dtype=bool)
    proved = np.any(inverse != 0.0, axis=(1, 2))
    for spread in spreads:
        proved &= np.all(np.isfinite(spread), axis=1)
    spreads = [np.where(np.isfinite(spread), spread, 1.0) for spread in spreads]
    error = np.abs(np.eye(n) - inverse @ matrix)
    for _ in range(INFLATIONS):
        spread, row_spread, factor_spread = spreads
        here = boxes_about(problem, x, spread, row_spread, factor_spread)
        a_low, a_high = problem.rows.slope_bounds(here.low[:, at.w], here.high[:, at.w]) if m else (a, a)
        if len(q):
            a_low, a_high = a_low.copy(), a_high.copy()
            a_low[:, q], a_high[:, q] = multiply(
                a_low[:, q], a_high[:, q], here.low[:, at.u], here.high[:, at.u]
            )
        ar = radius(a_low, a_high, a)
        fr = np.zeros_like(a)
        move = ar * row_spread
        steep = (np.abs(a) + ar) * times(w, spread)
        if len(q):
            fr[:, q] = radius(here.low[:, at.f], here.high[:, at.f], f[:, q])
            move[:, q] += fr[:, q] * factor_spread
            steep[:, q] += (np.abs(f[:, q]) + fr[:, q]) * times(v, spread)
        size_row = times(g, spread) + times(b, steep)
        loose = times(error, spread) + times(size_n, size_row + times(b, move)) * (3.0 * gamma(k))
        images = [
            up((shift + times(own, loose) + times(size, move)) * (1.0 + gamma(k))) + TINY
            for shift, size, (_, _, own) in zip(shifts, sizes, views, strict=True)
        ]
        inside = proved & ~good
        for image, spread in zip(images, spreads, strict=True):
            inside &= np.all(image < spread, axis=1)
        good |= inside
        if np.all(good | ~proved):
            break
        grow = ~good[:, None]
        spreads = [
            np.where(grow & (image < 1e6 * (1.0 + largest)), np.maximum(image * 1.2, spread), spread)
            for image, spread, largest in zip(
                images, spreads, (size_x, times(w, size_x), times(v, size_x)), strict=True
            )
        ]
    return Certified(good, x, *spreads)
