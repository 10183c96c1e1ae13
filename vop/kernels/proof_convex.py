"""The small convex problem of a proof: maximise λmin(Σ c_k C_k − T) over the simplex.

A log-barrier path in (c, t), see Boyd & Vandenberghe, Convex Optimization, ch. 11: minimise
−τt − log det(Σ c_k C_k − T − t1) − Σ log c_k with Σ c_k = 1 by Newton steps while τ grows. With
W = (Σ c_k C_k − T − t1)⁻¹ the covariance X = W/tr W bounds the optimum from above,
max_c λmin ≤ max_k tr(C_k X) − tr(T X) over *all* columns, so that a negative bound shows that no
weights exist and X is a witness. The columns that exceed the active ones along X join them. It stops
as soon as weights are found, or the shortfall is known to a few percent: most targets need no optimum. Everything is float arithmetic that
proposes; what it finds is proved elsewhere.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from vop.hermitian import pack_row, unpack_row
from vop.kernels.proof_psd import cholesky

#: Outcomes of :func:`convex_weights`.
FOUND, NONE, UNDECIDED = 1, 0, 2

#: Weights are multiples of 2⁻⁴⁸, so that their sum is exactly 1 and is checked in integers.
WEIGHT_UNIT = 2.0**-48

_START = 16
_ROUNDS = 120
#: Of the scale: least eigenvalue at which the search stops, and gap at which it gives up.
_ENOUGH = 1e-9
_CONVERGED = 1e-11
#: Relative accuracy to which the shortfall of a target without weights is settled.
_SETTLED = 0.03


@njit(cache=True, nogil=True, error_model="numpy")
def convex_weights(columns, columns_t, target, ranking, scale, n, gain, limit, witness):
    """Weights c with λmin(Σ c C − T) > 0, or a witness that there are none.

    Parameters
    ----------
    columns : (K, n²) float32; columns_t : (n², K) float64, its transpose.
    target : (n²,) float64 T. ranking : (K,), larger means likelier to matter; overwritten.
    scale : size of the largest eigenvalues. gain : (n²,) inner weights of the packing.
    limit : most columns in use at a time.
    witness : (n²,) written: packed X of unit trace with the least upper bound found.

    Returns
    -------
    status, m, chosen (limit,), c (limit,), upper : m terms, c multiples of WEIGHT_UNIT of sum 1.
    """
    width = n * n
    n_columns = columns.shape[0]
    root = np.sqrt(gain)
    chosen = np.zeros(limit, dtype=np.int64)
    c = np.zeros(limit)
    active = np.zeros(n_columns, dtype=np.bool_)
    values = np.empty(n_columns)
    m = min(_START, n_columns, limit)
    for i in range(m):
        best = np.argmax(ranking)
        chosen[i] = best
        active[best] = True
        ranking[best] = -np.inf
        c[i] = 1.0 / m

    square = np.empty((n, n), dtype=np.complex128)
    factor = np.zeros((n, n), dtype=np.complex128)
    inverse = np.zeros((n, n), dtype=np.complex128)
    w = np.empty((n, n), dtype=np.complex128)
    half = np.empty((n, n), dtype=np.complex128)
    current = np.empty(width)
    moved = np.empty(width)
    f = np.empty(width)
    rows = np.empty((width, limit + 1))
    hessian = np.empty((limit + 1, limit + 1))
    gradient = np.empty(limit + 1)
    step = np.empty(limit + 1)
    other = np.empty(limit + 1)
    trial = np.empty(limit)

    _mix(columns, chosen, c, m, target, current)
    norm = 0.0
    for p in range(width):
        norm += gain[p] * current[p] ** 2
    # Well inside: a start near the boundary would begin with a τ too large to follow the path.
    t = -1.5 * math.sqrt(norm) - 1e-3 * scale
    tau = 0.0
    upper = np.inf
    status = UNDECIDED

    for _ in range(_ROUNDS):
        unpack_row(current, n, square)
        sound = False
        for _ in range(400):
            if cholesky(square, n, t, factor) == n:
                sound = True
                break
            t -= max(0.1 * (min(upper, scale) - t), 1e-12 * scale)
        if not sound:
            break
        logdet = _invert(factor, n, inverse)
        # W = L⁻ᴴ L⁻¹
        trace_w = 0.0
        for i in range(n):
            for j in range(i + 1):
                total = 0.0j
                for k in range(i, n):
                    total += inverse[k, i].conjugate() * inverse[k, j]
                w[i, j] = total
                w[j, i] = total.conjugate()
            trace_w += w[i, i].real
        pack_row(w, n, f)
        for p in range(width):
            f[p] *= gain[p]
        if tau == 0.0:
            tau = trace_w

        # Upper bound by X = W/tr W, over all columns.
        for k in range(n_columns):
            values[k] = 0.0
        along = 0.0
        for p in range(width):
            row = columns_t[p]
            along += f[p] * target[p]
            for k in range(n_columns):
                values[k] += f[p] * row[k]
        bound = (values.max() - along) / trace_w
        if bound < upper:
            upper = bound
            for p in range(width):
                witness[p] = f[p] / (gain[p] * trace_w)
        if t > _ENOUGH * scale:
            status = FOUND
            break
        if upper < -1e-13 * scale:
            status = NONE
            if upper - t < _SETTLED * -upper:
                break
        if upper - t < _CONVERGED * scale:
            break

        # Columns that exceed the active ones along X join.
        top = -np.inf
        for i in range(m):
            top = max(top, values[chosen[i]])
        joined = False
        for _ in range(3):
            best, most = -1, top + 1e-12 * abs(top)
            for k in range(n_columns):
                if not active[k] and values[k] > most:
                    best, most = k, values[k]
            if best < 0:
                break
            if m == limit:
                m = _drop_least(chosen, c, m, active)
            share = 0.5 / m
            for _ in range(12):
                for p in range(width):
                    moved[p] = (1.0 - share) * current[p] + share * (np.float64(columns[best, p]) - target[p])
                unpack_row(moved, n, square)
                if cholesky(square, n, t, factor) == n:
                    break
                share *= 0.5
            for i in range(m):
                c[i] *= 1.0 - share
            chosen[m] = best
            c[m] = share
            active[best] = True
            m += 1
            joined = True
            _mix(columns, chosen, c, m, target, current)
        if joined:
            continue

        # Newton step.
        for i in range(m):
            unpack_row(columns[chosen[i]], n, square)
            _congruent(inverse, square, n, half, w)
            pack_row(w, n, moved)
            for p in range(width):
                rows[p, i] = root[p] * moved[p]
            gradient[i] = -values[chosen[i]] - 1.0 / c[i]
        for i in range(n):
            for j in range(n):
                square[i, j] = 1.0 if i == j else 0.0
        _congruent(inverse, square, n, half, w)
        pack_row(w, n, moved)
        for p in range(width):
            rows[p, m] = root[p] * moved[p]
        gradient[m] = trace_w - tau
        size = m + 1
        for i in range(size):
            for j in range(i + 1):
                hessian[i, j] = 0.0
        for p in range(width):
            row = rows[p]
            for i in range(size):
                v = row[i]
                if i == m:
                    v = -v
                for j in range(min(i + 1, m)):
                    hessian[i, j] += v * row[j]
            hessian[m, m] += row[m] * row[m]
        for i in range(m):
            hessian[i, i] += 1.0 / c[i] ** 2
        if not _factor_real(hessian, size):
            break
        for i in range(size):
            step[i] = -gradient[i]
            other[i] = 1.0 if i < m else 0.0
        _solve_real(hessian, size, step)
        _solve_real(hessian, size, other)
        above, below = 0.0, 0.0
        for i in range(m):
            above += step[i]
            below += other[i]
        slope = 0.0
        for i in range(size):
            step[i] -= above / below * other[i]
            slope += gradient[i] * step[i]

        length = 1.0
        for i in range(m):
            if step[i] < 0.0:
                length = min(length, -0.95 * c[i] / step[i])
        start = -tau * t - logdet
        for i in range(m):
            start -= math.log(c[i])
        for _ in range(40):
            total = 0.0
            for i in range(m):
                trial[i] = c[i] + length * step[i]
                total += trial[i]
            for i in range(m):
                trial[i] /= total
            _mix(columns, chosen, trial, m, target, moved)
            unpack_row(moved, n, square)
            new_t = t + length * step[m]
            if cholesky(square, n, new_t, factor) == n:
                reached = -tau * new_t
                for i in range(n):
                    reached -= 2.0 * math.log(factor[i, i].real)
                for i in range(m):
                    reached -= math.log(trial[i])
                if reached <= start + 0.05 * length * slope + 1e-9 * abs(start):
                    break
            length *= 0.5
        else:
            length = 0.0
        if length > 0.0:
            t = new_t
            for i in range(m):
                c[i] = trial[i]
            for p in range(width):
                current[p] = moved[p]
        if length == 0.0 or -slope < 1.0:
            wanted = 4.0 * (n + m) / max(upper - t, 1e-13 * scale)
            tau *= min(max(wanted / tau, 4.0), 32.0)
            if tau * scale > 1e14:
                break

    if status == UNDECIDED and t > 0.0:
        status = FOUND
    if status == FOUND:
        m = _round(columns, chosen, c, m, target, n, square, factor, moved, trial)
    return status, m, chosen, c, upper


@njit(cache=True, nogil=True, error_model="numpy")
def _mix(columns, chosen, c, m, target, out):
    for p in range(out.shape[0]):
        out[p] = -target[p]
    for i in range(m):
        row = columns[chosen[i]]
        for p in range(out.shape[0]):
            out[p] += c[i] * np.float64(row[p])


@njit(cache=True, nogil=True, error_model="numpy")
def _invert(factor, n, inverse):
    """Inverse of a lower triangle; returns log det of factor·factorᴴ."""
    logdet = 0.0
    for j in range(n):
        logdet += 2.0 * math.log(factor[j, j].real)
        inverse[j, j] = 1.0 / factor[j, j].real
        for i in range(j + 1, n):
            total = 0.0j
            for k in range(j, i):
                total -= factor[i, k] * inverse[k, j]
            inverse[i, j] = total / factor[i, i].real
    return logdet


@njit(cache=True, nogil=True, error_model="numpy")
def _congruent(lower, a, n, half, out):
    """out = lower · a · lowerᴴ, upper triangle."""
    for i in range(n):
        for j in range(n):
            total = 0.0j
            for k in range(i + 1):
                total += lower[i, k] * a[k, j]
            half[i, j] = total
    for i in range(n):
        for j in range(i, n):
            total = 0.0j
            for k in range(j + 1):
                total += half[i, k] * lower[j, k].conjugate()
            out[i, j] = total


@njit(cache=True, nogil=True, error_model="numpy")
def _drop_least(chosen, c, m, active):
    least = 0
    for i in range(m):
        if c[i] < c[least]:
            least = i
    active[chosen[least]] = False
    rest = 1.0 - c[least]
    chosen[least], c[least] = chosen[m - 1], c[m - 1]
    for i in range(m - 1):
        c[i] /= rest
    return m - 1


@njit(cache=True, nogil=True, error_model="numpy")
def _factor_real(a, size):
    for i in range(size):
        for j in range(i + 1):
            total = a[i, j]
            for k in range(j):
                total -= a[i, k] * a[j, k]
            if i > j:
                a[i, j] = total / a[j, j]
            elif total > 0.0:
                a[i, i] = math.sqrt(total)
            else:
                return False
    return True


@njit(cache=True, nogil=True, error_model="numpy")
def _solve_real(a, size, x):
    for i in range(size):
        for k in range(i):
            x[i] -= a[i, k] * x[k]
        x[i] /= a[i, i]
    for i in range(size - 1, -1, -1):
        for k in range(i + 1, size):
            x[i] -= a[k, i] * x[k]
        x[i] /= a[i, i]


@njit(cache=True, nogil=True, error_model="numpy")
def _round(columns, chosen, c, m, target, n, square, factor, packed, trial):
    """Drop weights that are not needed, and round the rest to multiples of WEIGHT_UNIT of sum 1."""
    for threshold in (0.03, 3e-3, 1e-4, 1e-6, 0.0):
        kept, largest, total = 0, 0, 0.0
        for i in range(m):
            trial[i] = c[i] if c[i] >= threshold else 0.0
            total += trial[i]
            if trial[i] > trial[largest]:
                largest = i
        if total <= 0.0:
            continue
        rest = 1.0
        for i in range(m):
            trial[i] = math.floor(trial[i] / total / WEIGHT_UNIT) * WEIGHT_UNIT
            rest -= trial[i]
        trial[largest] += rest
        if threshold > 0.0:
            _mix(columns, chosen, trial, m, target, packed)
            unpack_row(packed, n, square)
            size = 0.0
            for i in range(n):
                size += abs(square[i, i].real)
            if cholesky(square, n, 1e-13 * size, factor) < n:
                continue
        for i in range(m):
            if trial[i] > 0.0:
                chosen[kept] = chosen[i]
                c[kept] = trial[i]
                kept += 1
        return kept
    return m
