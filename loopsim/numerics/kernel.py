"""The step loop of Radau IIA over arrays: plain loops that know no circuit, compiled where numba is installed.

Solves C x' = s(t) - G x - B psi(W x + c, V x + d) with constant, possibly singular C. Method, transformation and step control
after E. Hairer, G. Wanner, Solving Ordinary Differential Equations II (1996), section IV.8, and their paper Stiff differential
equations solved by Radau methods (1999) for more than three stages (both from memory).

Letters: n unknowns, m nonlinear rows, k stages. Z (k, n): stage minus start of the step. W = T^-1 Z (k, n). Matrices are in compressed
rows (starts, columns, values). Small functions: each compiles in a moment, and the compiler joins them again.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from loopsim.devices import phi
from loopsim.numerics.compiled import compile_entry, compile_kernel, compile_table

# what `advance` returns
DONE, FULL, TOO_SMALL, NOT_FINITE, PIVOT = 0, 1, 2, 3, 4

# places in `state` (floats): what one call hands to the next
TIME, STEP, LAST_STEP, LAST_ERROR, RATE, POLYNOMIAL_STEP, NEWTON_NORM, THETA = 0, 1, 2, 3, 4, 5, 6, 7
STATE_SIZE = 8
# places in `counts` (integers)
STEPS, REJECTED, NEWTON_FAILED, EVALUATIONS, FACTORS, CORNER, WORST, FIRST, FRESH, SIGN = 0, 1, 2, 3, 4, 5, 6, 7, 8, 9
COUNTS_SIZE = 10
# places in `control` (floats)
NEWTON_LIMIT, MAX_STEP, MIN_STEP, PEAK_SHARE, INDEX_TWO_SPAN = 0, 1, 2, 3, 4
CONTROL_SIZE = 5

SAFETY = 0.9  # factor on the predicted step
SHRINK, GROW = 0.125, 8.0  # a step changes at most by these
LANDING = 1.0 + 1e-9  # a step that would end this close to a corner ends on it
BEND, TOO_BENT = 0.25, 0.5  # wanted and largest change of the Jacobian over a step; see docs/explanation/transient.md
UNSEEN = 1e-2  # rate of Newton assumed at least until two changes were seen: this step may be the first to meet a knee
STALE = 0.03  # expected ratio of two changes of Newton up to which factors are used again
ROUNDING = 0.1  # of the tolerance: changes of Newton that stop shrinking below it are rounding; doubled at each
# failure in a row, because rounding grows with C / h and a shorter step does not help against it
SHORT = 1e-9  # times the first step: shorter than any time constant that grows
SMALL_PIVOT = 1e-9  # over the largest entry of its row: below it the sparse pivots are chosen anew
NOTHING = 1e-140  # far along a ladder numbers die away; their squares would fall below what the processor handles at full speed
SINE, LINEAR = 0, 1  # forms of a waveform


def _scalar_choice(condition: bool, yes: float, no: float) -> float:
    return yes if condition else no


_VALUE = compile_table(phi.VALUE, {"choose": _scalar_choice})
_SLOPE = compile_table(phi.SLOPE, {"choose": _scalar_choice})
_value_0, _value_1, _value_2, _value_3, _value_4, _value_5, _value_6, _value_7 = _VALUE
_slope_0, _slope_1, _slope_2, _slope_3, _slope_4, _slope_5, _slope_6, _slope_7 = _SLOPE


@compile_kernel
def phi_value(kind: int, w: float, p: Any) -> float:
    """phi of one row; kind: number of loopsim.devices.phi.Kind."""
    if kind == 0:
        return _value_0(w, p)
    if kind == 1:
        return _value_1(w, p)
    if kind == 2:
        return _value_2(w, p)
    if kind == 3:
        return _value_3(w, p)
    if kind == 4:
        return _value_4(w, p)
    if kind == 5:
        return _value_5(w, p)
    if kind == 6:
        return _value_6(w, p)
    return _value_7(w, p)


@compile_kernel
def phi_slope(kind: int, w: float, p: Any) -> float:
    """d phi / dw of one row."""
    if kind == 0:
        return _slope_0(w, p)
    if kind == 1:
        return _slope_1(w, p)
    if kind == 2:
        return _slope_2(w, p)
    if kind == 3:
        return _slope_3(w, p)
    if kind == 4:
        return _slope_4(w, p)
    if kind == 5:
        return _slope_5(w, p)
    if kind == 6:
        return _slope_6(w, p)
    return _slope_7(w, p)


@compile_kernel
def row_times(starts: Any, columns: Any, values: Any, row: int, x: Any) -> float:
    """One row of a matrix times x."""
    total = 0.0
    for j in range(starts[row], starts[row + 1]):
        total += values[j] * x[columns[j]]
    return total


@compile_kernel
def right_side(
    x: Any, source: Any, A: Any, A_columns: Any, A_values: Any, W: Any, W_columns: Any, W_values: Any, c: Any,
    V: Any, V_columns: Any, V_values: Any, d: Any, kinds: Any, parameters: Any, joined: Any, out: Any,
) -> None:
    """out = source - [G B] [x; psi]; joined (n + m): room for [x; psi]."""
    n = x.size
    for i in range(n):
        joined[i] = x[i]
    for k in range(kinds.size):
        value = phi_value(kinds[k], c[k] + row_times(W, W_columns, W_values, k, x), parameters[k])
        joined[n + k] = value * (d[k] + row_times(V, V_columns, V_values, k, x))
    for i in range(n):
        out[i] = source[i] - row_times(A, A_columns, A_values, i, joined)


@compile_kernel
def jacobian(
    x: Any, W: Any, W_columns: Any, W_values: Any, c: Any, V: Any, V_columns: Any, V_values: Any, d: Any, kinds: Any,
    parameters: Any, base: Any, stamp_place: Any, stamp_row: Any, stamp_value: Any, gain: Any, out: Any,
) -> None:
    """out = G + B (diag(phi' u) W + diag(phi) V) as values of the pattern; gain (2 m): room. stamp_row >= m takes phi, else phi' u."""
    m = kinds.size
    for k in range(m):
        w = c[k] + row_times(W, W_columns, W_values, k, x)
        gain[k] = phi_slope(kinds[k], w, parameters[k]) * (d[k] + row_times(V, V_columns, V_values, k, x))
        gain[m + k] = 0.0
        if V[k + 1] > V[k]:
            gain[m + k] = phi_value(kinds[k], w, parameters[k])
    for j in range(base.size):
        out[j] = base[j]
    for j in range(stamp_place.size):
        out[stamp_place[j]] += stamp_value[j] * gain[stamp_row[j]]


@compile_kernel
def factor_dense(shift: Any, mass: Any, jac: Any, lu: Any, pivots: Any) -> int:
    """L U of shift * mass + jac with partial pivoting, reciprocals on the diagonal; mass, jac: (n * n,).

    Returns the sign of the determinant (of real matrices; 1 for complex ones), 0 where singular.
    """
    n = lu.shape[0]
    sign = 1
    for i in range(n):
        for j in range(n):
            lu[i, j] = shift * mass[i * n + j] + jac[i * n + j]
    for k in range(n):
        best, at = abs(lu[k, k]), k
        for i in range(k + 1, n):
            if abs(lu[i, k]) > best:
                best, at = abs(lu[i, k]), i
        if not (best > 0.0):
            return 0
        pivots[k] = at
        if at != k:
            sign = -sign
            for j in range(n):
                lu[k, j], lu[at, j] = lu[at, j], lu[k, j]
        if lu[k, k].real < 0.0:
            sign = -sign
        lu[k, k] = 1.0 / lu[k, k]
        for i in range(k + 1, n):
            if lu[i, k] != 0.0:
                lu[i, k] *= lu[k, k]
                for j in range(k + 1, n):
                    lu[i, j] -= lu[i, k] * lu[k, j]
    return sign


@compile_kernel
def solve_dense(lu: Any, pivots: Any, b: Any) -> None:
    """b becomes the solution."""
    n = lu.shape[0]
    for k in range(n):
        at = pivots[k]
        b[k], b[at] = b[at], b[k]
    for k in range(n):
        for i in range(k + 1, n):
            b[i] -= lu[i, k] * b[k]
    for k in range(n - 1, -1, -1):
        for j in range(k + 1, n):
            b[k] -= lu[k, j] * b[j]
        b[k] *= lu[k, k]


@compile_kernel
def factor_sparse(
    shift: Any, mass: Any, jac: Any, entry_start: Any, entry_from: Any, entry_column: Any, lu_start: Any, lu_column: Any,
    lu_diagonal: Any, floor: float, lu: Any, work: Any,
) -> int:
    """L U on a fixed pattern with fixed pivots, row by row; diagonal as reciprocals.

    Returns the sign of the product of the pivots (of real matrices), 0 where a pivot has become small.
    Row i (after permutation) of the matrix: places entry_from of (mass, jac) at columns entry_column. Row i of L and U together: columns
    lu_column[lu_start[i] : lu_start[i + 1]] ascending, the diagonal at place lu_diagonal[i]. floor: smallest pivot over the row's largest.
    """
    sign = 1
    for i in range(lu_diagonal.size):
        for j in range(lu_start[i], lu_start[i + 1]):
            work[lu_column[j]] = 0.0
        largest = 0.0
        for j in range(entry_start[i], entry_start[i + 1]):
            value = shift * mass[entry_from[j]] + jac[entry_from[j]]
            work[entry_column[j]] = value
            largest = max(largest, abs(value))
        for j in range(lu_start[i], lu_diagonal[i]):
            k = lu_column[j]
            below = work[k] * lu[lu_diagonal[k]]
            lu[j] = below
            for q in range(lu_diagonal[k] + 1, lu_start[k + 1]):
                work[lu_column[q]] -= below * lu[q]
        pivot = work[i]
        if not (abs(pivot) > floor * largest):
            return 0
        if pivot.real < 0.0:
            sign = -sign
        lu[lu_diagonal[i]] = 1.0 / pivot
        for j in range(lu_diagonal[i] + 1, lu_start[i + 1]):
            lu[j] = work[lu_column[j]]
    return sign


@compile_kernel
def solve_sparse(
    lu: Any, lu_start: Any, lu_column: Any, lu_diagonal: Any, row_order: Any, column_order: Any, work: Any, b: Any
) -> None:
    """b becomes the solution; row i of the factors is row row_order[i] of the matrix, column i its column column_order[i]."""
    n = lu_diagonal.size
    for i in range(n):
        total = b[row_order[i]]
        for j in range(lu_start[i], lu_diagonal[i]):
            total -= lu[j] * work[lu_column[j]]
        work[i] = total if abs(total) > NOTHING else 0.0 * total
    for i in range(n - 1, -1, -1):
        total = work[i]
        for j in range(lu_diagonal[i] + 1, lu_start[i + 1]):
            total -= lu[j] * work[lu_column[j]]
        work[i] = total * lu[lu_diagonal[i]] if abs(total) > NOTHING else 0.0 * total
    for i in range(n):
        b[column_order[i]] = work[i]


@compile_kernel
def wave_piece(form: int, data: Any, first: int, last: int, time: float, piece: Any) -> None:
    """The formula that holds around `time`, so that both sides of a corner are exact: piece becomes (value, slope, origin) of a straight
    piece, or (offset, 0, 0) where a sine has not begun. data[first:last]: SINE: offset, amplitude, angular frequency, phase, delay;
    LINEAR: period (0: none), delay, then ascending (time, value) pairs, level before and behind."""
    if form == SINE:
        piece[0], piece[1], piece[2] = data[first], 0.0, 0.0
        if time < data[first + 4]:
            piece[0] += data[first + 1] * np.sin(data[first + 3])
        return
    period, start = data[first], data[first + 1]
    if period > 0.0 and time > start:
        start += period * np.floor((time - start) / period)
    low, high = 0, (last - first - 2) // 2 - 1
    base = first + 2
    local = time - start
    if local <= data[base]:
        piece[0], piece[1], piece[2] = data[base + 1], 0.0, 0.0
        return
    if local >= data[base + 2 * high]:
        piece[0], piece[1], piece[2] = data[base + 2 * high + 1], 0.0, 0.0
        return
    while high - low > 1:
        middle = (low + high) // 2
        if data[base + 2 * middle] <= local:
            low = middle
        else:
            high = middle
    t0, v0 = data[base + 2 * low], data[base + 2 * low + 1]
    t1, v1 = data[base + 2 * high], data[base + 2 * high + 1]
    piece[0], piece[1], piece[2] = v0, (v1 - v0) / (t1 - t0), start + t0


@compile_kernel
def wave_at(form: int, data: Any, first: int, piece: Any, time: float) -> float:
    """Value at `time` by the formula in `piece`."""
    if form == SINE:
        if time < data[first + 4]:
            return piece[0]
        return data[first] + data[first + 1] * np.sin(data[first + 2] * (time - data[first + 4]) + data[first + 3])
    return piece[0] + piece[1] * (time - piece[2])


@compile_kernel
def choose_pieces(forms: Any, starts: Any, data: Any, time: float, pieces: Any) -> None:
    """The formula of every waveform around `time`."""
    for k in range(forms.size):
        wave_piece(forms[k], data, starts[k], starts[k + 1], time, pieces[k])


@compile_kernel
def sources(
    time: float, base: Any, forms: Any, starts: Any, data: Any, pieces: Any, column_starts: Any, column_rows: Any,
    column_values: Any, out: Any,
) -> None:
    """out = base + sum of column_k wave_k(time); wave 0 multiplies all others (the common ramp) and its column holds what else it
    scales."""
    for i in range(base.size):
        out[i] = base[i]
    if forms.size == 0:
        return
    share = wave_at(forms[0], data, starts[0], pieces[0], time)
    for k in range(forms.size):
        value = share
        if k > 0:
            value = share * wave_at(forms[k], data, starts[k], pieces[k], time)
        for j in range(column_starts[k], column_starts[k + 1]):
            out[column_rows[j]] += column_values[j] * value


@compile_kernel
def polynomial_from_stages(Z: Any, monomials: Any, out: Any) -> None:
    """Coefficients (k, n) of the collocation polynomial: x(start + q h) = x + out[0] q + out[1] q^2 + ..."""
    stages, n = Z.shape
    for a in range(stages):
        for i in range(n):
            total = 0.0
            for j in range(stages):
                total += monomials[a, j] * Z[j, i]
            out[a, i] = total


@compile_kernel
def extrapolate(polynomial: Any, ratio: float, nodes: Any, Z: Any) -> None:
    """Stages of the next step from the last step's polynomial; ratio: next step over last step."""
    stages, n = Z.shape
    for i in range(n):
        end = 0.0
        for a in range(stages):
            end += polynomial[a, i]
        for j in range(stages):
            q = 1.0 + nodes[j] * ratio
            total = 0.0
            for a in range(stages - 1, -1, -1):
                total = (total + polynomial[a, i]) * q
            Z[j, i] = total - end


@compile_kernel
def mix(matrix: Any, rows: Any, out: Any) -> None:
    """out = matrix rows: (k, k) times (k, n)."""
    stages, n = rows.shape
    for a in range(stages):
        for i in range(n):
            out[a, i] = matrix[a, 0] * rows[0, i]
        for j in range(1, stages):
            factor = matrix[a, j]
            for i in range(n):
                out[a, i] += factor * rows[j, i]


@compile_kernel
def scales(x: Any, peak: Any, control: Any, relative: Any, absolute: Any, out: Any) -> None:
    """out = absolute + relative * max(|x|, share * peak): what an error of 1 means in each unknown."""
    for i in range(x.size):
        out[i] = absolute[i] + relative[i] * max(abs(x[i]), control[PEAK_SHARE] * peak[i])


@compile_kernel
def scaled_norm(x: Any, scale: Any, weight: Any) -> float:
    """Root mean square of weight * x / scale."""
    total = 0.0
    for i in range(x.size):
        part = weight[i] * x[i] / scale[i]
        total += part * part
    return np.sqrt(total / x.size)


@compile_kernel
def worst_entry(x: Any, scale: Any, weight: Any) -> int:
    """Where weight * x / scale is largest (or not a number)."""
    at, most = 0, -1.0
    for i in range(x.size):
        part = abs(weight[i] * x[i] / scale[i])
        if not (part <= most):
            at, most = i, part
    return at


@compile_kernel
def newton_residual(
    order_real: float, pairs_real: Any, pairs_imaginary: Any, step: float, W: Any, F: Any, inverse: Any, C: Any, C_columns: Any,
    C_values: Any, mass_times: Any, out: Any,
) -> None:
    """out = T^-1 F - (Lambda / step) C W, by blocks; mass_times (k, n): room for C W."""
    stages, n = W.shape
    for a in range(stages):
        for i in range(n):
            mass_times[a, i] = row_times(C, C_columns, C_values, i, W[a])
    mix(inverse, F, out)
    shift = order_real / step
    for i in range(n):
        out[0, i] -= shift * mass_times[0, i]
    for p in range(pairs_real.size):
        re, im = pairs_real[p] / step, pairs_imaginary[p] / step
        a = 1 + 2 * p
        for i in range(n):
            u, v = mass_times[a, i], mass_times[a + 1, i]
            out[a, i] -= re * u - im * v
            out[a + 1, i] -= im * u + re * v


@compile_kernel
def start_iterate(have_polynomial: bool, polynomial: Any, ratio: float, nodes: Any, inverse: Any, Z: Any, W: Any) -> None:
    """First guess of the stages: the last step's polynomial carried on, or the start of the step itself."""
    if have_polynomial:
        extrapolate(polynomial, ratio, nodes, Z)
        mix(inverse, Z, W)
    else:
        Z[:, :] = 0.0
        W[:, :] = 0.0


@compile_kernel
def error_right_side(
    gamma_step: float, weights: Any, Z: Any, C: Any, C_columns: Any, C_values: Any, slope: Any, room: Any, out: Any
) -> None:
    """out = f(start) + (gamma / h) C (weights . Z)."""
    stages, n = Z.shape
    for i in range(n):
        total = 0.0
        for j in range(stages):
            total += weights[j] * Z[j, i]
        room[i] = total
    for i in range(n):
        out[i] = slope[i] + gamma_step * row_times(C, C_columns, C_values, i, room)


@compile_kernel
def jacobian_change(before: Any, after: Any, change: Any, scale: Any, weight: Any, lu: Any, pivots: Any, room: Any) -> float:
    """How fast Newton with the Jacobian of the start would converge: size of (gamma / h C + J)^-1 (J_end - J_start) change over
    change's."""
    n = change.size
    for i in range(n):
        room[i] = 0.0
        for j in range(n):
            room[i] += (after[i * n + j] - before[i * n + j]) * change[j]
    solve_dense(lu, pivots, room)
    return scaled_norm(room, scale, weight) / max(scaled_norm(change, scale, weight), 1e-300)


@compile_kernel
def keep_step(
    place: int, time: float, step: float, x: Any, polynomial: Any, kept: Any, out_time: Any, out_step: Any, out_x: Any, out_p: Any
) -> None:
    """Write one accepted step into the record; kept: unknowns that are recorded."""
    out_time[place] = time
    out_step[place] = step
    for j in range(kept.size):
        out_x[place, j] = x[kept[j]]
        for a in range(polynomial.shape[0]):
            out_p[place, a, j] = polynomial[a, kept[j]]


@compile_kernel
def full_residual(
    step: float, Z: Any, F: Any, inverse_A: Any, C: Any, C_columns: Any, C_values: Any, room: Any, out: Any
) -> None:
    """out = F - (1 / step) (A^-1 x C) Z."""
    stages, n = Z.shape
    mix(inverse_A, Z, room)
    for a in range(stages):
        for i in range(n):
            out[a, i] = F[a, i] - row_times(C, C_columns, C_values, i, room[a]) / step


@compile_kernel
def place_block(jac: Any, stage: int, n: int, out: Any) -> None:
    """Write jac (n * n,) as the diagonal block of `stage` into the matrix of all stages, row by row in `out`."""
    side = int(np.sqrt(out.size) + 0.5)
    for i in range(n):
        for j in range(n):
            out[(stage * n + i) * side + stage * n + j] = jac[i * n + j]


@compile_kernel
def factor_real(
    shift: float, mass: Any, jac: Any, entry_start: Any, entry_from: Any, entry_column: Any, lu_start: Any, lu_column: Any,
    lu_diagonal: Any, work: Any, lu: Any, pivots: Any,
) -> int:
    """Factors of shift C + J, dense where the sparse pattern is empty; sign of the determinant (sparse: of the pivots), 0: failed."""
    if lu_diagonal.size == 0:
        return factor_dense(shift, mass, jac, lu, pivots)
    return factor_sparse(
        shift, mass, jac, entry_start, entry_from, entry_column, lu_start, lu_column, lu_diagonal, SMALL_PIVOT, lu[0], work
    )


@compile_kernel
def factor_pairs(
    step: float, pairs_real: Any, pairs_imaginary: Any, mass: Any, jac: Any, entry_start: Any, entry_from: Any, entry_column: Any,
    lu_start: Any, lu_column: Any, lu_diagonal: Any, work_pair: Any, lu_pairs: Any, pivots_pairs: Any,
) -> bool:
    """Factors of each complex pair's matrix (a + i b) / step C + J."""
    for p in range(pairs_real.size):
        shift = complex(pairs_real[p] / step, pairs_imaginary[p] / step)
        if lu_diagonal.size == 0:
            if factor_dense(shift, mass, jac, lu_pairs[p], pivots_pairs[p]) == 0:
                return False
        elif factor_sparse(
            shift, mass, jac, entry_start, entry_from, entry_column, lu_start, lu_column, lu_diagonal, SMALL_PIVOT, lu_pairs[p, 0],
            work_pair,
        ) == 0:
            return False
    return True


@compile_kernel
def solve_any(
    lu: Any, pivots: Any, lu_start: Any, lu_column: Any, lu_diagonal: Any, row_order: Any, column_order: Any, work: Any, b: Any
) -> None:
    """b becomes the solution, by whichever factors there are."""
    if lu_diagonal.size == 0:
        solve_dense(lu, pivots, b)
    else:
        solve_sparse(lu[0], lu_start, lu_column, lu_diagonal, row_order, column_order, work, b)


@compile_kernel
def newton_increment(
    R: Any, lu: Any, pivots: Any, lu_pairs: Any, pivots_pairs: Any, lu_start: Any, lu_column: Any, lu_diagonal: Any, row_order: Any,
    column_order: Any, work: Any, work_pair: Any, pair: Any,
) -> None:
    """R becomes the change of W."""
    solve_any(lu, pivots, lu_start, lu_column, lu_diagonal, row_order, column_order, work, R[0])
    for p in range(lu_pairs.shape[0]):
        a = 1 + 2 * p
        for i in range(pair.size):
            pair[i] = complex(R[a, i], R[a + 1, i])
        solve_any(lu_pairs[p], pivots_pairs[p], lu_start, lu_column, lu_diagonal, row_order, column_order, work_pair, pair)
        for i in range(pair.size):
            R[a, i] = pair[i].real
            R[a + 1, i] = pair[i].imag


@compile_kernel
def newton_norm(R: Any, scale: Any, weight: Any) -> float:
    """Root mean square over all stages of the scaled change."""
    total = 0.0
    for a in range(R.shape[0]):
        for i in range(R.shape[1]):
            part = weight[i] * R[a, i] / scale[i]
            total += part * part
    return np.sqrt(total / R.size)


@compile_kernel
def newton_verdict(iteration: int, limit: int, full: bool, fresh: bool, rounding: float, size: float, state: Any, control: Any) -> float:
    """What the sizes of the changes say: 0 converged, negative go on, positive the factor on the step of a new try.

    RATE holds theta / (1 - theta), the estimate of the change still to come over the last one (full: the factor on its square);
    rounding: size below which changes that stop shrinking are noise; NEWTON_NORM: the last size; THETA the
    last ratio of two sizes that rounding had no part in.
    """
    if not (size < 1e300):
        return 0.5
    if iteration == 0:
        state[THETA] = 0.0
    if iteration > 0:
        theta = size / max(state[NEWTON_NORM], 1e-300)
        if state[NEWTON_NORM] > rounding:
            state[THETA] = theta
        if full:  # every iteration has its own Jacobian: the next change is in proportion to the square of this one
            state[RATE] = size / max(state[NEWTON_NORM], 1e-150) ** 2
            state[NEWTON_NORM] = size
            close = (theta if fresh else 1.0) * theta * size <= control[NEWTON_LIMIT]
            if size <= 0.1 * control[NEWTON_LIMIT] or (theta > 0.5 and size <= rounding) or close:
                return 0.0
            return 0.25 if theta > 2.0 else -1.0
        if theta >= 0.99:
            # at the level of rounding the sizes no longer shrink, and are small enough all the same
            return 0.5 if size > max(rounding, 0.1 * control[NEWTON_LIMIT]) else 0.0
        state[RATE] = theta / (1.0 - theta)
        left = state[RATE] * size * theta ** (limit - 1 - iteration) / control[NEWTON_LIMIT]
        if size <= rounding and (theta > 0.5 or iteration == limit - 1):
            return 0.0
        if left >= 1.0:
            return 0.8 * max(1e-4, min(20.0, left)) ** (-1.0 / (4.0 + limit - 1 - iteration))
    state[NEWTON_NORM] = size
    left = max(1.0, 10.0 * state[RATE]) * size * size if full else state[RATE] * size
    return 0.0 if left <= control[NEWTON_LIMIT] else -1.0


@compile_kernel
def error_factor(error: float, stages: int, iterations: int, limit: int) -> float:
    """What the step is divided by: error norm, and Newton's effort."""
    safety = min(SAFETY, SAFETY * (1.0 + 2.0 * limit) / (iterations + 2.0 * limit))
    return max(1.0 / GROW, min(1.0 / SHRINK, error ** (1.0 / (stages + 1.0)) / safety))


@compile_kernel
def next_step(error: float, step: float, stages: int, iterations: int, limit: int, state: Any, counts: Any) -> float:
    """Step after an accepted one: the elementary rule, and Gustafsson's prediction from the last two errors."""
    quotient = error_factor(error, stages, iterations, limit)
    if counts[FIRST] == 0:
        trend = (state[LAST_STEP] / step) * (error * error / state[LAST_ERROR]) ** (1.0 / (stages + 1.0)) / SAFETY
        quotient = max(quotient, min(1.0 / SHRINK, trend))
    state[LAST_STEP] = step
    state[LAST_ERROR] = max(1e-2, error)
    return step / quotient


@compile_kernel
def clip_to_corner(time: float, step: float, corner: float, longest: float) -> float:
    """The step to take: not past the next corner, and not so that a splinter is left before it."""
    step = min(step, longest)
    gap = corner - time
    if step * LANDING >= gap:
        return gap
    if 2.0 * step > gap:
        return 0.5 * gap
    return step


@compile_entry(phi)
def advance(
    x: Any, peak: Any, control: Any, state: Any, counts: Any, corners: Any, kept: Any,
    A: Any, A_columns: Any, A_values: Any, W: Any, W_columns: Any, W_values: Any, c: Any, V: Any, V_columns: Any, V_values: Any, d: Any,
    kinds: Any, parameters: Any, C: Any, C_columns: Any, C_values: Any, mass: Any, base_jac: Any, stamp_place: Any, stamp_row: Any,
    stamp_value: Any, source_base: Any, forms: Any, wave_starts: Any, wave_data: Any, column_starts: Any, column_rows: Any,
    column_values: Any, nodes: Any, transform: Any, inverse: Any, order_real: float, pairs_real: Any, pairs_imaginary: Any,
    error_weights: Any, monomials: Any, relative: Any, absolute: Any, index_two: Any, error_weight: Any,
    entry_start: Any, entry_from: Any, entry_column: Any, lu_start: Any, lu_column: Any, lu_diagonal: Any, row_order: Any,
    column_order: Any, polynomial: Any, lu: Any, pivots: Any, lu_pairs: Any, pivots_pairs: Any, jac: Any, inverse_A: Any,
    mass_full: Any, jac_full: Any, lu_full: Any, pivots_full: Any, out_time: Any, out_step: Any,
    out_x: Any, out_p: Any,
) -> tuple[int, int]:
    """Step on from `state` until the last of `corners`, or until the record is full; (what stopped it, steps recorded).

    x (n) and peak (n) move along; corners: ascending times to hit exactly, the last is the end; out_*: record of accepted steps.
    """
    stages, n, m = nodes.size, x.size, kinds.size
    limit = 7 + (5 * (stages - 3)) // 2
    full = lu_full.shape[0] > 0
    Z, P, F, R, room = np.zeros((stages, n)), np.zeros((stages, n)), np.zeros((stages, n)), np.zeros((stages, n)), np.zeros((stages, n))
    joined, gain, source, scale, weight = np.zeros(n + m), np.zeros(2 * m), np.zeros(n), np.zeros(n), np.zeros(n)
    slope, error, trial, work, spare = np.zeros(n), np.zeros(n), np.zeros(n), np.zeros(n), np.zeros(n)
    work_pair, pair = np.zeros(n, dtype=np.complex128), np.zeros(n, dtype=np.complex128)
    pieces, jac_stage = np.zeros((forms.size, 3)), np.zeros(jac.size)
    time, step = state[TIME], state[STEP]
    recorded, rejected_last, chosen, stuck = 0, False, False, 0
    if counts[SIGN] == 0:  # the sign that the determinant has for short steps
        jacobian(
            x, W, W_columns, W_values, c, V, V_columns, V_values, d, kinds, parameters, base_jac, stamp_place, stamp_row, stamp_value,
            gain, jac,
        )
        counts[SIGN] = factor_real(
            order_real / (SHORT * step), mass, jac, entry_start, entry_from, entry_column, lu_start, lu_column, lu_diagonal, work, lu,
            pivots,
        )
    while counts[CORNER] < corners.size:
        if recorded == out_time.size:
            state[TIME], state[STEP] = time, step
            return FULL, recorded
        corner = corners[counts[CORNER]]
        step = clip_to_corner(time, step, corner, control[MAX_STEP])
        if not (step > control[MIN_STEP] * max(abs(time), abs(corner - time) * 1e-6)):
            if corner - time <= 4e-16 * abs(corner):  # corners closer than time can tell apart are one
                time = corner
                counts[CORNER] += 1
                continue
            state[TIME], state[STEP] = time, step
            return TOO_SMALL, recorded
        if counts[FRESH] != 0 or not chosen:
            choose_pieces(forms, wave_starts, wave_data, time + 0.5 * step, pieces)
            chosen = True
        if counts[FRESH] != 0:  # a new start or a corner is behind: nothing of the last step's shape holds
            counts[FRESH] = 0
            state[POLYNOMIAL_STEP] = 0.0
        if not rejected_last:
            scales(x, peak, control, relative, absolute, scale)
            jacobian(
                x, W, W_columns, W_values, c, V, V_columns, V_values, d, kinds, parameters, base_jac, stamp_place, stamp_row,
                stamp_value, gain, jac,
            )
            sources(time, source_base, forms, wave_starts, wave_data, pieces, column_starts, column_rows, column_values, source)
            right_side(
                x, source, A, A_columns, A_values, W, W_columns, W_values, c, V, V_columns, V_values, d, kinds, parameters, joined, slope
            )
        for i in range(n):
            weight[i] = error_weight[i]
            if index_two[i] != 0:
                weight[i] *= min(1.0, step / control[INDEX_TWO_SPAN])
        counts[FACTORS] += 1
        sign = factor_real(
            order_real / step, mass, jac, entry_start, entry_from, entry_column, lu_start, lu_column, lu_diagonal, work, lu, pivots
        )
        if sign != 0 and not full and not factor_pairs(
            step, pairs_real, pairs_imaginary, mass, jac, entry_start, entry_from, entry_column, lu_start, lu_column, lu_diagonal,
            work_pair, lu_pairs, pivots_pairs,
        ):
            sign = 0
        if sign == 0 and lu_diagonal.size > 0:
            state[TIME], state[STEP] = time, step
            return PIVOT, recorded
        if sign != counts[SIGN]:  # longer than the time constant of something that grows: the method would see it decay
            step *= 0.5
            rejected_last = True
            counts[REJECTED] += 1
            continue
        start_iterate(state[POLYNOMIAL_STEP] > 0.0, polynomial, step / max(state[POLYNOMIAL_STEP], 1e-300), nodes, inverse, Z, P)
        if not full:
            state[RATE] = max(max(state[RATE], 1e-16) ** 0.8, UNSEEN)
        verdict, iterations, fresh = -1.0, 0, True
        while verdict < 0.0 and iterations < limit:
            for a in range(stages):
                for i in range(n):
                    trial[i] = x[i] + Z[a, i]
                sources(
                    time + nodes[a] * step, source_base, forms, wave_starts, wave_data, pieces, column_starts, column_rows, column_values,
                    source,
                )
                right_side(
                    trial, source, A, A_columns, A_values, W, W_columns, W_values, c, V, V_columns, V_values, d, kinds, parameters, joined,
                    F[a],
                )
            if full:
                # the last factors do as well where the last change was small against the curvature seen so far
                fresh = iterations == 0 or state[RATE] * state[NEWTON_NORM] > STALE
                if fresh:
                    for a in range(stages):
                        for i in range(n):
                            trial[i] = x[i] + Z[a, i]
                        jacobian(
                            trial, W, W_columns, W_values, c, V, V_columns, V_values, d, kinds, parameters, base_jac, stamp_place,
                            stamp_row, stamp_value, gain, jac_stage,
                        )
                        place_block(jac_stage, a, n, jac_full)
                    if factor_dense(1.0 / step, mass_full, jac_full, lu_full, pivots_full) == 0:
                        verdict = 0.5
                        break
                full_residual(step, Z, F, inverse_A, C, C_columns, C_values, room, R)
                solve_dense(lu_full, pivots_full, R.reshape(stages * n))
                for a in range(stages):
                    for i in range(n):
                        Z[a, i] += R[a, i]
            else:
                newton_residual(order_real, pairs_real, pairs_imaginary, step, P, F, inverse, C, C_columns, C_values, room, R)
                newton_increment(
                    R, lu, pivots, lu_pairs, pivots_pairs, lu_start, lu_column, lu_diagonal, row_order, column_order, work, work_pair, pair
                )
                for a in range(stages):
                    for i in range(n):
                        P[a, i] += R[a, i]
                mix(transform, P, Z)
            size = newton_norm(R, scale, weight)
            verdict = newton_verdict(iterations, limit, full, fresh, min(1.0, ROUNDING * 2.0**stuck), size, state, control)
            iterations += 1
        counts[EVALUATIONS] += iterations * stages
        if verdict != 0.0:  # no convergence: a smaller step, with the same Jacobian
            counts[WORST] = worst_entry(R[0], scale, weight)
            counts[NEWTON_FAILED] += 1
            stuck += 1
            counts[REJECTED] += 1
            step *= verdict if verdict > 0.0 else 0.5
            state[RATE] = 1e30 if full else 1.0
            rejected_last = True
            continue
        error_right_side(order_real / step, error_weights, Z, C, C_columns, C_values, slope, spare, error)
        solve_any(lu, pivots, lu_start, lu_column, lu_diagonal, row_order, column_order, work, error)
        size = scaled_norm(error, scale, weight)
        if size >= 1.0 and (rejected_last or counts[FIRST] != 0):  # the estimate of a very stiff start is too large: filter it once more
            for i in range(n):
                trial[i] = x[i] + error[i]
            sources(time, source_base, forms, wave_starts, wave_data, pieces, column_starts, column_rows, column_values, source)
            right_side(
                trial, source, A, A_columns, A_values, W, W_columns, W_values, c, V, V_columns, V_values, d, kinds, parameters, joined, F[0]
            )
            error_right_side(order_real / step, error_weights, Z, C, C_columns, C_values, F[0], spare, error)
            solve_any(lu, pivots, lu_start, lu_column, lu_diagonal, row_order, column_order, work, error)
            size = scaled_norm(error, scale, weight)
        size = max(size, 1e-10)
        if not (size < 1.0):
            counts[WORST] = worst_entry(error, scale, weight)
            counts[REJECTED] += 1
            step *= 0.1 if counts[FIRST] != 0 or not (size < 1e300) else 1.0 / error_factor(size, stages, iterations, limit)
            rejected_last = True
            continue
        bend = state[THETA]
        if full:
            bend = jacobian_change(jac, jac_stage, Z[stages - 1], scale, weight, lu, pivots, error)
            if bend > TOO_BENT:
                step *= max(0.2, BEND / bend)
                rejected_last = True
                counts[REJECTED] += 1
                continue
        if full and factor_real(
            order_real / step, mass, jac_stage, entry_start, entry_from, entry_column, lu_start, lu_column, lu_diagonal, work, lu, pivots
        ) != counts[SIGN]:  # the same at the end of the step: it would have gone past a fold along what is no longer stable
            step *= 0.5
            rejected_last = True
            counts[REJECTED] += 1
            continue
        polynomial_from_stages(Z, monomials, polynomial)
        keep_step(recorded, time, step, x, polynomial, kept, out_time, out_step, out_x, out_p)
        recorded += 1
        stuck = 0
        counts[STEPS] += 1
        state[POLYNOMIAL_STEP] = step
        for i in range(n):
            x[i] += Z[stages - 1, i]
            peak[i] = max(peak[i], abs(x[i]))
        proposed = next_step(size, step, stages, iterations, limit, state, counts)
        if bend > 0.0:
            proposed = min(proposed, step * max(0.2, BEND / bend))
        counts[FIRST] = 0
        if rejected_last:
            proposed = min(proposed, step)
        rejected_last = False
        if step >= corner - time:
            time = corner
            counts[CORNER] += 1
            counts[FRESH] = 1
            counts[FIRST] = 1
        else:
            time += step
        step = proposed
    state[TIME], state[STEP] = time, step
    return DONE, recorded


@compile_entry(phi)
def sample(times: Any, out_time: Any, out_step: Any, out_x: Any, out_p: Any, values: Any) -> None:
    """values (times, kept): the recorded polynomials at ascending or mixed `times`, the last piece holding at its end."""
    place = 0
    last = out_time.size - 1
    for j in range(times.size):
        if times[j] < out_time[place] or (place < last and times[j] >= out_time[place + 1]):
            low, high = 0, last + 1
            if place < last and times[j] >= out_time[place + 1]:
                low = place + 1
                reach = 1
                while low + reach <= last and out_time[low + reach] <= times[j]:
                    low += reach
                    reach *= 2
                high = min(low + reach, last + 1)
            while high - low > 1:
                middle = (low + high) // 2
                if out_time[middle] <= times[j]:
                    low = middle
                else:
                    high = middle
            place = low
        q = (times[j] - out_time[place]) / out_step[place]
        for i in range(values.shape[1]):
            total = 0.0
            for a in range(out_p.shape[1] - 1, -1, -1):
                total = (total + out_p[place, a, i]) * q
            values[j, i] = out_x[place, i] + total

