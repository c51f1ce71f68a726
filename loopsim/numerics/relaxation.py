"""The linear relaxation: each scalar function replaced by its chord and error, the rest solved by one real inverse for everything at once
(L. Kolev, Interval Methods for Circuit Analysis, 1993, from memory)."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.numerics.boxes import Boxes
from loopsim.numerics.enclosure import HUGE, TINY, UNIT, down, gamma, middle, radius, up
from loopsim.numerics.problem import Problem

Array: TypeAlias = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Relaxed:
    """What a linear relaxation leaves behind for the choice of a split. impact: (b, m) share of the widths that each row's chord error
    makes; inverse: (b, n, n) of the matrix of chords, approximate."""

    boxes: Boxes
    impact: Array
    inverse: Array


def invert(matrices: Array) -> Array:
    """Approximate inverses (b, n, n); zeros where a matrix is singular or not finite (which proves nothing, and is safe)."""
    good = np.asarray(np.isfinite(matrices).all(axis=(1, 2)))
    if not good.all():
        matrices = np.where(good[:, None, None], matrices, np.eye(matrices.shape[1]))
    try:
        inverse = np.linalg.inv(matrices)
    except np.linalg.LinAlgError:
        inverse = np.zeros_like(matrices)
        for i, matrix in enumerate(matrices):
            try:
                inverse[i] = np.linalg.inv(matrix)
            except np.linalg.LinAlgError:
                good[i] = False
    good &= (np.abs(inverse) < 1e100).all(axis=(1, 2))  # false for what is no number
    return np.asarray(inverse if good.all() else np.where(good[:, None, None], inverse, 0.0))


def times(matrix: Array, vector: Array) -> Array:
    """matrix @ vector, batch axes first on either."""
    return vector @ matrix.T if matrix.ndim == 2 else np.asarray((matrix @ vector[..., None])[..., 0])


def relax(problem: Problem, boxes: Boxes) -> Relaxed:
    """Replace each scalar function by its chord and error, solve the linear rest by one real inverse, intersect.

    x = N (N M = I - E): x = xm + N r + E (x - xm) for any N, r the residual of the relaxed row at xm; so an inaccurate inverse only widens.
    """
    n, m = problem.n, problem.m
    g, b, w, v = problem.magnitudes
    c, c_rad, d, d_rad, s, s_rad = problem.centres
    q = problem.product
    at = problem.layout
    x_low, x_high = boxes.low[:, at.x], boxes.high[:, at.x]
    w_low, w_high = boxes.low[:, at.w], boxes.high[:, at.w]
    xm = middle(x_low, x_high)
    rx = radius(x_low, x_high, xm)
    a, e_low, e_high = problem.rows.chord(w_low, w_high)
    em = middle(e_low, e_high)
    er = radius(e_low, e_high, em)
    lines = a
    f = np.zeros_like(a)
    u = np.ones_like(a)
    if len(q):
        um = middle(boxes.low[:, at.u], boxes.high[:, at.u])
        ur = radius(boxes.low[:, at.u], boxes.high[:, at.u], um)
        fm = middle(boxes.low[:, at.f], boxes.high[:, at.f])
        fr = radius(boxes.low[:, at.f], boxes.high[:, at.f], fm)
        f[:, q] = fm
        u[:, q] = um
        # phi u = um (a w + e) + fm (u - um) + (phi - fm)(u - um)
        lines = a * u
        er = up(np.abs(u) * er)
        er[:, q] = up(er[:, q] + up(fr * ur))
        em = em * u
        er = er + (np.abs(em) * 2.0 + np.abs(lines) * np.maximum(np.abs(w_low), np.abs(w_high))) * (
            2.0 * UNIT
        )
    slope = (
        lines[..., None] * problem.W + f[..., None] * problem.V if len(q) else lines[..., None] * problem.W
    )
    matrix = problem.G + problem.B @ slope
    inverse = invert(matrix)
    wm = times(problem.W, xm) + c
    vm = times(problem.V, xm) + d if len(q) else u
    inner = lines * wm + em + (f * (vm - u) if len(q) else 0.0)
    residual = s - times(problem.G, xm) - times(problem.B, inner)
    # rounding of the residual and of the matrix, in magnitudes
    size_x = np.abs(xm)
    inner_size = np.abs(lines) * (times(w, size_x) + np.abs(c)) + np.abs(em)
    inner_rad = er + np.abs(lines) * c_rad
    matrix_rad = np.abs(lines) * times(w, rx)
    if len(q):
        inner_size = inner_size + np.abs(f) * (times(v, size_x) + np.abs(d) + np.abs(u))
        inner_rad = inner_rad + np.abs(f) * d_rad
        matrix_rad = matrix_rad + np.abs(f) * times(v, rx)
    k = n + 2 * m + 8
    row_round = (np.abs(s) + times(g, size_x) + times(b, inner_size)) * gamma(k)
    matrix_round = (times(g, rx) + times(b, matrix_rad)) * gamma(k)
    error = np.eye(n) - inverse @ matrix
    size_n = np.abs(inverse)
    residual_rad = s_rad + row_round + matrix_round
    reach = times(np.abs(matrix), rx)
    through = inverse @ problem.B
    spread_b = times(b, inner_rad)
    # the product N B and N M carry rounding of their own
    x_rad = (
        times(np.abs(through), inner_rad)
        + times(np.abs(error), rx)
        + times(size_n, residual_rad + (spread_b + reach + np.abs(residual)) * gamma(k))
        + rx * (4.0 * UNIT)
    )
    x_rad = up(x_rad * (1.0 + gamma(k))) + TINY
    dx = times(inverse, residual)
    proved = np.any(inverse != 0.0, axis=(1, 2))[:, None]
    low, high = boxes.low.copy(), boxes.high.copy()
    low[:, at.x] = np.where(proved, np.maximum(x_low, down(xm + dx - x_rad)), x_low)
    high[:, at.x] = np.where(proved, np.minimum(x_high, up(xm + dx + x_rad)), x_high)
    # the same for w = W x + c, with the cancellation inside W N B kept
    w_through = problem.W @ through
    w_rad = (
        times(np.abs(w_through), inner_rad)
        + times(
            w,
            times(np.abs(error), rx)
            + times(size_n, residual_rad + 2.0 * (spread_b + reach + np.abs(residual)) * gamma(k)),
        )
        + times(w, rx * (4.0 * UNIT) + (size_x + np.abs(dx)) * gamma(k))
        + np.abs(c) * gamma(2)
        + c_rad
    )
    w_rad = up(w_rad * (1.0 + gamma(k))) + TINY
    dw = times(problem.W, dx)
    low[:, at.w] = np.where(proved, np.maximum(w_low, down(wm + dw - w_rad)), w_low)
    high[:, at.w] = np.where(proved, np.minimum(w_high, up(wm + dw + w_rad)), w_high)
    width = np.maximum(w_high - w_low, TINY)
    impact = np.max(np.abs(w_through) / width[:, :, None], axis=1, initial=0.0) * inner_rad
    return Relaxed(Boxes(low, high), np.nan_to_num(impact, nan=0.0, posinf=HUGE), inverse)
