"""The small convex problem of a proof: maximise λmin(Σ c_k C_k − T) over the simplex.

A log-barrier path in (c, t), see Boyd & Vandenberghe, Convex Optimization, ch. 11: minimise
−τt − log det(Σ c_k C_k − T − t1) − Σ log c_k with Σ c_k = 1 by Newton steps while τ grows. With
W = (Σ c_k C_k − T − t1)⁻¹ the covariance X = W/tr W bounds the optimum from above,
max_c λmin ≤ max_k tr(C_k X) − tr(T X) over *all* columns, so that a negative bound shows that no
weights exist and X is a witness. The columns that exceed the active ones along X join them. It stops
as soon as weights are found, or the shortfall is known to a few percent: most targets need no optimum.
Everything is float arithmetic that proposes; what it finds is proved elsewhere.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from vop.hermitian import pack_row
from vop.kernels.proof_psd import cholesky, expand

#: Outcomes of :func:`convex_weights`.
FOUND, NONE, UNDECIDED = 1, 0, 2

#: Weights are multiples of 2⁻⁴⁸, so that their sum is exactly 1 and is checked in integers.
WEIGHT_UNIT = 2.0**-48

#: Columns that the problem starts with, that join at once, and Newton steps at most.
_START, _JOIN, _ROUNDS = 16, 3, 120
#: Of the scale: least eigenvalue at which the search stops, and gap at which it gives up.
_ENOUGH, _CONVERGED = 1e-9, 1e-11
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
    chosen = np.zeros(limit, dtype=np.int64)
    c = np.zeros(limit)
    active = np.zeros(columns.shape[0], dtype=np.bool_)
    values = np.empty(columns.shape[0])
    m = min(_START, columns.shape[0], limit)
    for i in range(m):
        best = np.argmax(ranking)
        chosen[i] = best
        active[best] = True
        ranking[best] = -np.inf
        c[i] = 1.0 / m

    square = np.empty((n, n), dtype=np.complex128)
    factor = np.zeros((n, n), dtype=np.complex128)
    inverse = np.zeros((n, n), dtype=np.complex128)
    current = np.empty(width)
    moved = np.empty(width)
    f = np.empty(width)
    rows = np.empty((width, limit + 1))
    hessian = np.empty((limit + 1, limit + 1))
    gradient = np.empty(limit + 1)
    step = np.empty(limit + 1)
    trial = np.empty(limit)

    _mix(columns, chosen, c, m, target, current)
    norm = 0.0
    for p in range(width):
        norm += gain[p] * current[p] ** 2
    # Well inside: a start near the boundary would begin with a τ too large to follow the path.
    t = -1.5 * math.sqrt(norm) - 1e-3 * scale
    tau, upper, status = 0.0, np.inf, UNDECIDED

    for _ in range(_ROUNDS):
        t, sound = _lowered(current, t, min(upper, scale), scale, n, square, factor)
        if not sound:
            break
        logdet = _invert(factor, n, inverse)
        trace = _resolvent(inverse, n, gain, square, f)
        if tau == 0.0:
            tau = trace
        upper = _bounded(columns_t, f, target, trace, gain, values, upper, witness)
        status, settled = _outcome(t, upper, scale)
        if settled:
            break
        before = m
        m = _join(columns, values, chosen, c, m, active, target, t, n, current, moved, square, factor)
        if m != before:
            continue
        _newton(columns, chosen, c, m, values, inverse, trace, tau, n, gain, square, moved, rows, gradient)
        slope = _direction(rows, c, m, gradient, hessian, step)
        if not slope < np.inf:
            break
        if -slope < 1.0:
            # Near the path: the same W to first order at the end of the step bounds far better.
            corrected = _corrected(rows, step, m, inverse, n, gain, square, moved, factor, f)
            if corrected > 0.0:
                upper = _bounded(columns_t, f, target, corrected, gain, values, upper, witness)
                status, settled = _outcome(t, upper, scale)
                if settled:
                    break
        start = -tau * t - logdet
        for i in range(m):
            start -= math.log(c[i])
        t, length = _walk(
            columns,
            chosen,
            c,
            m,
            target,
            tau,
            t,
            step,
            slope,
            start,
            n,
            current,
            moved,
            trial,
            square,
            factor,
        )
        if length == 0.0 or -slope < 1.0:
            wanted = 4.0 * (n + m) / max(upper - t, 1e-13 * scale)
            tau *= min(max(wanted / tau, 4.0), 32.0)
            if tau * scale > 1e14:
                break

    if status != FOUND and t > 0.0:
        status = FOUND
    if status == FOUND:
        m = _rounded(columns, chosen, c, m, target, n, square, factor, moved, trial)
    return status, m, chosen, c, upper


@njit(cache=True, nogil=True, error_model="numpy")
def _lowered(current, t, ceiling, scale, n, square, factor):
    """Factorise M − t1, lowering t where needed; (t, whether it went)."""
    expand(current, n, square)
    for _ in range(400):
        if cholesky(square, n, t, factor) == n:
            return t, True
        t -= max(0.1 * (ceiling - t), 1e-12 * scale)
    return t, False


@njit(cache=True, nogil=True, error_model="numpy")
def _mix(columns, chosen, c, m, target, out):
    """out = Σ c C − T."""
    for p in range(out.shape[0]):
        out[p] = -target[p]
    for i in range(m):
        row = columns[chosen[i]]
        for p in range(out.shape[0]):
            out[p] += c[i] * np.float64(row[p])


@njit(cache=True, nogil=True, error_model="numpy")
def _dot(a, b):
    total = 0.0
    for p in range(a.shape[0]):
        total += a[p] * b[p]
    return total


@njit(cache=True, nogil=True, error_model="numpy")
def _largest(values):
    largest = -np.inf
    for k in range(values.shape[0]):
        largest = max(largest, values[k])
    return largest


@njit(cache=True, nogil=True, error_model="numpy")
def _along(columns_t, f, values):
    """values[k] = Σ_p columns_t[p, k] f[p], in fixed order."""
    for k in range(values.shape[0]):
        values[k] = 0.0
    for p in range(f.shape[0]):
        row = columns_t[p]
        for k in range(values.shape[0]):
            values[k] += f[p] * row[k]


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
def _resolvent(inverse, n, gain, w, f):
    """f = functional of W = L⁻ᴴ L⁻¹; returns tr W."""
    trace = 0.0
    for i in range(n):
        for j in range(i + 1):
            total = 0.0j
            for k in range(i, n):
                total += inverse[k, i].conjugate() * inverse[k, j]
            w[i, j] = total
            w[j, i] = total.conjugate()
        trace += w[i, i].real
    pack_row(w, n, f)
    for p in range(f.shape[0]):
        f[p] *= gain[p]
    return trace


@njit(cache=True, nogil=True, error_model="numpy")
def _bounded(columns_t, f, target, trace, gain, values, upper, witness):
    """The least upper bound so far; values[k] = tr(C_k W) of the functional f of a W ⪰ 0."""
    _along(columns_t, f, values)
    bound = (_largest(values) - _dot(f, target)) / trace
    if not bound < upper:
        return upper
    for p in range(f.shape[0]):
        witness[p] = f[p] / (gain[p] * trace)
    return bound


@njit(cache=True, nogil=True, error_model="numpy")
def _outcome(t, upper, scale):
    """(status, whether the answer is known)."""
    if t > _ENOUGH * scale:
        return FOUND, True
    if upper < -1e-13 * scale:
        return NONE, upper - t < _SETTLED * -upper
    return UNDECIDED, upper - t < _CONVERGED * scale


@njit(cache=True, nogil=True, error_model="numpy")
def _corrected(rows, step, m, inverse, n, gain, square, packed, factor, f):
    """f = functional of W − W dS W, with dS the change of S = Σ c C − T − t1 along the Newton step.

    It meets the conditions of the path to first order. Returns its trace; 0 where it is not ⪰ 0.
    """
    for p in range(packed.shape[0]):
        change = -step[m] * rows[p, m]
        for i in range(m):
            change += step[i] * rows[p, i]
        packed[p] = -change / math.sqrt(gain[p])
    expand(packed, n, square)
    for i in range(n):
        square[i, i] += 1.0
    # 1 − L⁻¹ dS L⁻ᴴ = G Gᴴ, and the wanted matrix is (L⁻ᴴG)(L⁻ᴴG)ᴴ.
    if cholesky(square, n, 0.0, factor) < n:
        return 0.0
    trace = 0.0
    half = np.zeros((n, n), dtype=np.complex128)
    for i in range(n):
        for j in range(n):
            total = 0.0j
            for k in range(max(i, j), n):
                total += inverse[k, i].conjugate() * factor[k, j]
            half[i, j] = total
    for i in range(n):
        for j in range(i, n):
            total = 0.0j
            for k in range(n):
                total += half[i, k] * half[j, k].conjugate()
            square[i, j] = total
        trace += square[i, i].real
    pack_row(square, n, f)
    for p in range(f.shape[0]):
        f[p] *= gain[p]
    return trace


@njit(cache=True, nogil=True, error_model="numpy")
def _join(columns, values, chosen, c, m, active, target, t, n, current, moved, square, factor):
    """Let the columns join that exceed the active ones along X; returns the new count."""
    top = -np.inf
    for i in range(m):
        top = max(top, values[chosen[i]])
    top += 1e-12 * abs(top)
    for _ in range(_JOIN):
        best, most = -1, top
        for k in range(values.shape[0]):
            if not active[k] and values[k] > most:
                best, most = k, values[k]
        if best < 0:
            break
        if m == chosen.shape[0]:
            m = _drop_least(chosen, c, m, active)
            _mix(columns, chosen, c, m, target, current)
        share = 0.5 / m
        for _ in range(12):
            for p in range(current.shape[0]):
                moved[p] = (1.0 - share) * current[p] + share * (np.float64(columns[best, p]) - target[p])
            expand(moved, n, square)
            if cholesky(square, n, t, factor) == n:
                break
            share *= 0.5
        for i in range(m):
            c[i] *= 1.0 - share
        chosen[m] = best
        c[m] = share
        active[best] = True
        m += 1
        _mix(columns, chosen, c, m, target, current)
    return m


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
def _newton(columns, chosen, c, m, values, inverse, trace, tau, n, gain, square, packed, rows, gradient):
    """Gradient, and rows[:, i] = packed L⁻¹C_iL⁻ᴴ (last: of the identity) scaled for inner products."""
    half = np.empty((n, n), dtype=np.complex128)
    for i in range(m + 1):
        if i < m:
            expand(columns[chosen[i]], n, square)
            gradient[i] = -values[chosen[i]] - 1.0 / c[i]
        else:
            for a in range(n):
                for b in range(n):
                    square[a, b] = 1.0 if a == b else 0.0
            gradient[i] = trace - tau
        _congruent(inverse, square, n, half)
        pack_row(square, n, packed)
        for p in range(packed.shape[0]):
            rows[p, i] = math.sqrt(gain[p]) * packed[p]


@njit(cache=True, nogil=True, error_model="numpy")
def _congruent(lower, a, n, half):
    """a ← lower · a · lowerᴴ, upper triangle."""
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
            a[i, j] = total


@njit(cache=True, nogil=True, error_model="numpy")
def _direction(rows, c, m, gradient, hessian, step):
    """Newton step with Σ dc = 0; returns its slope, ∞ where the Hessian is not positive definite."""
    size = m + 1
    for i in range(size):
        for j in range(size):
            hessian[i, j] = 0.0
    for p in range(rows.shape[0]):
        row = rows[p]
        for i in range(m):
            v = row[i]
            for j in range(i + 1):
                hessian[i, j] += v * row[j]
        for j in range(m):
            hessian[m, j] -= row[m] * row[j]
        hessian[m, m] += row[m] * row[m]
    for i in range(m):
        hessian[i, i] += 1.0 / c[i] ** 2
    if not _factor_real(hessian, size):
        return np.inf
    other = np.empty(size)
    for i in range(size):
        step[i] = -gradient[i]
        other[i] = 1.0 if i < m else 0.0
    _solve_real(hessian, size, step)
    _solve_real(hessian, size, other)
    above, below, slope = 0.0, 0.0, 0.0
    for i in range(m):
        above += step[i]
        below += other[i]
    for i in range(size):
        step[i] -= above / below * other[i]
        slope += gradient[i] * step[i]
    return slope


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
def _walk(
    columns, chosen, c, m, target, tau, t, step, slope, start, n, current, moved, trial, square, factor
):
    """Go along the step as far as the barrier falls; returns (t, length), length 0 where it does not."""
    length = 1.0
    for i in range(m):
        if step[i] < 0.0:
            length = min(length, -0.95 * c[i] / step[i])
    for _ in range(40):
        total = 0.0
        for i in range(m):
            trial[i] = c[i] + length * step[i]
            total += trial[i]
        for i in range(m):
            trial[i] /= total
        _mix(columns, chosen, trial, m, target, moved)
        expand(moved, n, square)
        new_t = t + length * step[m]
        if cholesky(square, n, new_t, factor) == n:
            reached = -tau * new_t
            for i in range(n):
                reached -= 2.0 * math.log(factor[i, i].real)
            for i in range(m):
                reached -= math.log(trial[i])
            if reached <= start + 0.05 * length * slope + 1e-9 * abs(start):
                for i in range(m):
                    c[i] = trial[i]
                for p in range(current.shape[0]):
                    current[p] = moved[p]
                return new_t, length
        length *= 0.5
    return t, 0.0


@njit(cache=True, nogil=True, error_model="numpy")
def _rounded(columns, chosen, c, m, target, n, square, factor, packed, trial):
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
            expand(packed, n, square)
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
