"""Hull consistency on the linear rows and the scalar functions (F. Benhamou, L. Granvilliers, Handbook of Constraint Programming, 2006,
ch. 16, from memory)."""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.numerics.boxes import Boxes
from loopsim.numerics.enclosure import TINY, divide_clear, gamma, multiply, up
from loopsim.numerics.problem import Problem

Array: TypeAlias = NDArray[np.float64]

WIDE = 24  # terms in a row from which running sums are quicker than a product with a matrix of ones


def hull(problem: Problem, boxes: Boxes) -> Boxes:
    """One pass of hull consistency: every linear row to every variable in it, then every scalar function both ways."""
    table = problem.table
    b, count, width = len(boxes), table.count, len(table.exclude)
    tops = np.empty((b, 2 * count + 1))  # upper bounds of -z and of z
    np.negative(boxes.low[:, :count], out=tops[:, :count])
    tops[:, count:-1] = boxes.high[:, :count]
    tops[:, -1] = 0.0
    terms = np.empty((b, 3, *table.weight.shape))  # upper bounds of -c z, of c z, of |c z|
    np.multiply(np.take(tops, table.gather, axis=1), table.weight, out=terms[:, :2])
    np.maximum(terms[:, 0], terms[:, 1], out=terms[:, 2])
    others = (terms.reshape(-1, width) @ table.exclude).reshape(terms.shape) if width <= WIDE else _others(terms)
    # every term carries one rounding itself, the right side two more
    error = (others[:, 2] + table.size) * gamma(width + 4) + TINY
    answers = np.empty((b, 2 * error[0].size + 1))
    answers[:, :-1] = up((others[:, :2] + table.ends + error[:, None]) / table.weight).reshape(b, -1)
    answers[:, -1] = np.inf
    least = np.minimum(np.take(answers, table.places, axis=1).min(axis=1), tops[:, :-1])
    low, high = boxes.low.copy(), boxes.high.copy()
    np.negative(least[:, :count], out=low[:, :count])
    high[:, :count] = least[:, count:]
    if problem.m:
        _scalar(problem, low, high)
    return Boxes(low, high)


def _scalar(problem: Problem, low: Array, high: Array) -> None:
    """phi and psi to each other, in place: forward from w, back from psi."""
    at = problem.layout
    w_low, w_high = low[:, at.w], high[:, at.w]
    # a crossed interval is already empty; the functions are shown its ends in order
    safe_low, safe_high = np.minimum(w_low, w_high), np.maximum(w_low, w_high)
    lower, upper = problem.rows.bounds(safe_low, safe_high)
    q = problem.product
    p_low, p_high = low[:, at.p], high[:, at.p]
    if len(q) == 0:
        np.maximum(p_low, lower, out=p_low)
        np.minimum(p_high, upper, out=p_high)
        f_low, f_high = p_low, p_high
    else:
        u_low, u_high, fq_low, fq_high = low[:, at.u], high[:, at.u], low[:, at.f], high[:, at.f]
        f_low, f_high = np.maximum(p_low, lower), np.minimum(p_high, upper)
        f_low[:, q], f_high[:, q] = np.maximum(fq_low, lower[:, q]), np.minimum(fq_high, upper[:, q])
        pq_low, pq_high = multiply(f_low[:, q], f_high[:, q], u_low, u_high)
        pq_low, pq_high = np.maximum(pq_low, p_low[:, q]), np.minimum(pq_high, p_high[:, q])
        lower, upper = divide_clear(pq_low, pq_high, u_low, u_high)
        f_low[:, q], f_high[:, q] = np.maximum(f_low[:, q], lower), np.minimum(f_high[:, q], upper)
        lower, upper = divide_clear(pq_low, pq_high, f_low[:, q], f_high[:, q])
        low[:, at.u], high[:, at.u] = np.maximum(u_low, lower), np.minimum(u_high, upper)
        low[:, at.f], high[:, at.f] = f_low[:, q], f_high[:, q]
        p_low[:], p_high[:] = f_low, f_high
        p_low[:, q], p_high[:, q] = pq_low, pq_high
    lower, upper = problem.rows.inverse(safe_low, safe_high, f_low, f_high)
    low[:, at.w], high[:, at.w] = np.maximum(w_low, lower), np.minimum(w_high, upper)


def _others(t: Array) -> Array:
    """Sum of all other terms along the last axis, without subtracting any (prefix plus suffix sums)."""
    before = np.zeros_like(t)
    after = np.zeros_like(t)
    np.cumsum(t[..., :-1], axis=-1, out=before[..., 1:])
    after[..., :-1] = np.cumsum(t[..., :0:-1], axis=-1)[..., ::-1]
    return before + after
