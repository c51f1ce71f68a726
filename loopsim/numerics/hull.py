"""Hull consistency on the linear rows and the scalar functions (F. Benhamou, L. Granvilliers, Handbook of Constraint Programming, 2006,
ch. 16, from memory)."""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.numerics.boxes import Boxes
from loopsim.numerics.enclosure import TINY, divide_clear, down, gamma, multiply, up
from loopsim.numerics.problem import Problem

Array: TypeAlias = NDArray[np.float64]


def hull(problem: Problem, boxes: Boxes) -> Boxes:
    """One pass of hull consistency: every linear row to every variable in it, then every scalar function both ways."""
    table = problem.table
    b, linear = len(boxes), len(table.places)
    pad = np.zeros((b, 1))
    z_low = np.concatenate([boxes.low[:, :linear], pad], axis=1)[:, table.index]
    z_high = np.concatenate([boxes.high[:, :linear], pad], axis=1)[:, table.index]
    first, second = table.coefficient * z_low, table.coefficient * z_high
    t_low, t_high = np.minimum(first, second), np.maximum(first, second)
    size = np.maximum(-t_low, t_high)
    if len(table.exclude) <= 24:
        others_low, others_high, others_size = (
            t_low @ table.exclude,
            t_high @ table.exclude,
            size @ table.exclude,
        )
    else:
        others_low, others_high, others_size = _others(t_low), _others(t_high), _others(size)
    # every term carries one rounding itself, the right side two more
    error = (others_size + table.right_size) * gamma(len(table.exclude) + 4) + TINY
    first = (table.low - others_high - error) / table.coefficient
    second = (table.high - others_low + error) / table.coefficient
    ends = np.empty((2, b, first.shape[1] * first.shape[2] + 1))
    ends[0, :, :-1] = down(np.minimum(first, second)).reshape(b, -1)
    ends[1, :, :-1] = up(np.maximum(first, second)).reshape(b, -1)
    ends[0, :, -1], ends[1, :, -1] = -np.inf, np.inf
    low, high = boxes.low.copy(), boxes.high.copy()
    low[:, :linear] = np.maximum(low[:, :linear], ends[0][:, table.places].max(axis=2))
    high[:, :linear] = np.minimum(high[:, :linear], ends[1][:, table.places].min(axis=2))
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
