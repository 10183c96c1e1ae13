"""Local maximisation of tr(Q X)/max_k tr(A_k X) over X = W Wᴴ, many starts; proposes, decides nothing.

The maximum is smoothed to a p-norm, log tr(QX) − (1/p) log Σ_k tr(A_k X)^p, whose gradient along W is
QW/tr(QX) − BW with B = Σ μ_k A_k, μ_k ∝ tr(A_k X)^(p−1), tr(BX) = 1. Steps go along B⁻¹ times the
gradient, B⁻¹QW/tr(QX) − W, a power iteration of the pencil (Q, B) made safe by a search along the line,
while p grows.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from vop.hermitian import pack_row, unpack_row

#: Exponents p, from smooth to sharp.
_SOFT, _SHARP = 8.0, 4096.0
#: Of B's mean eigenvalue, added to B: directions that no near-maximal VOP sees stay bounded.
_RIDGE = 1e-3
#: Longest step, and halvings before a step is given up.
_LONGEST, _HALVINGS = 4.0, 8


@njit(cache=True, nogil=True, error_model="numpy")
def ascend(rows, columns, columns_t, start, steps, gain, best, ratio):
    """Maximise tr(Q X)/max_k tr(A_k X) from each start.

    Parameters
    ----------
    rows : (S, n²) float32, Q of each start, packed.
    columns : (K, n²) float32, the A_k; columns_t : (n², K) float64, their transpose.
    start : (S, n, r) complex128, W. steps : how many.
    gain : (n²,) inner weights of the packing.
    best : (S, n, r) complex128, written: the best W seen, of unit Frobenius norm.
    ratio : (S,) float64, written: max_k tr(A_k X)/tr(Q X) there, the smaller the better.
    """
    n_starts, n, rank = start.shape
    width, n_columns = columns_t.shape
    q = np.empty((n, n), dtype=np.complex128)
    b = np.empty((n, n), dtype=np.complex128)
    square = np.empty((n, n), dtype=np.complex128)
    w = np.empty((n, rank), dtype=np.complex128)
    towards = np.empty((n, rank), dtype=np.complex128)
    trial = np.empty((n, rank), dtype=np.complex128)
    f = np.empty(width)
    mixed = np.empty(width)
    values = np.empty(n_columns)
    for s in range(n_starts):
        _unpack(rows[s], n, q)
        w[:] = start[s]
        _normalise(w)
        along, top = _evaluate(w, rows[s], columns_t, gain, square, f, values)
        best[s] = w
        ratio[s] = np.inf
        if not (along > 0.0 and top > 0.0):
            continue
        ratio[s] = top / along
        length = 1.0
        for step in range(steps):
            power = _SOFT * (_SHARP / _SOFT) ** (step / max(steps - 1, 1))
            _mix(columns, values, top, power, mixed)
            level = math.log(along) - _smooth(values, top, power)
            _unpack(mixed, n, b)
            if not _solve(b, q, w, along, square, towards):
                break
            moved = False
            for _ in range(_HALVINGS):
                for i in range(n):
                    for c in range(rank):
                        trial[i, c] = w[i, c] + length * (towards[i, c] - w[i, c])
                _normalise(trial)
                new_along, new_top = _evaluate(trial, rows[s], columns_t, gain, square, f, values)
                if new_along > 0.0 and math.log(new_along) - _smooth(values, new_top, power) > level:
                    moved = True
                    break
                length *= 0.5
            if not moved:
                # The values belong to the trial: go back, and let p grow.
                along, top = _evaluate(w, rows[s], columns_t, gain, square, f, values)
                length = 1.0
                continue
            w[:] = trial
            along, top = new_along, new_top
            length = min(2.0 * length, _LONGEST)
            if top / along < ratio[s]:
                ratio[s] = top / along
                best[s] = w


@njit(cache=True, nogil=True, error_model="numpy")
def _unpack(row, n, out):
    unpack_row(row, n, out)


@njit(cache=True, nogil=True, error_model="numpy")
def _normalise(w):
    total = 0.0
    for i in range(w.shape[0]):
        for c in range(w.shape[1]):
            total += w[i, c].real ** 2 + w[i, c].imag ** 2
    total = 1.0 / math.sqrt(total) if total > 0.0 else 0.0
    for i in range(w.shape[0]):
        for c in range(w.shape[1]):
            w[i, c] *= total


@njit(cache=True, nogil=True, error_model="numpy")
def _evaluate(w, row, columns_t, gain, square, f, values):
    """values[k] = tr(A_k X); returns tr(Q X) and the largest value."""
    n, rank = w.shape
    for i in range(n):
        for j in range(i, n):
            total = 0.0j
            for c in range(rank):
                total += w[i, c] * w[j, c].conjugate()
            square[i, j] = total
    pack_row(square, n, f)
    along = 0.0
    for p in range(f.shape[0]):
        f[p] *= gain[p]
        along += f[p] * np.float64(row[p])
    for k in range(values.shape[0]):
        values[k] = 0.0
    for p in range(f.shape[0]):
        line = columns_t[p]
        for k in range(values.shape[0]):
            values[k] += f[p] * line[k]
    top = -np.inf
    for k in range(values.shape[0]):
        top = max(top, values[k])
    return along, top


@njit(cache=True, nogil=True, error_model="numpy")
def _floor(power):
    """Shares of the maximum below this add less than 1e-7 to the p-norm's sum, each."""
    return math.exp(-16.0 / power)


@njit(cache=True, nogil=True, error_model="numpy")
def _smooth(values, top, power):
    """log of the p-norm of the values; ∞ where they are not positive."""
    if not top > 0.0:
        return np.inf
    total, floor = 0.0, _floor(power) * top
    for k in range(values.shape[0]):
        if values[k] > floor:
            total += math.exp(power * math.log(values[k] / top))
    return math.log(top) + math.log(total) / power


@njit(cache=True, nogil=True, error_model="numpy")
def _mix(columns, values, top, power, out):
    """out = Σ μ_k A_k with μ_k ∝ values^(p−1), so that its value is 1."""
    for p in range(out.shape[0]):
        out[p] = 0.0
    total, floor = 0.0, _floor(power) * top
    for k in range(values.shape[0]):
        if values[k] > floor:
            share = math.exp((power - 1.0) * math.log(values[k] / top))
            total += share * values[k]
            for p in range(out.shape[0]):
                out[p] += share * np.float64(columns[k, p])
    for p in range(out.shape[0]):
        out[p] /= total


@njit(cache=True, nogil=True, error_model="numpy")
def _solve(b, q, w, along, factor, out):
    """out = (B + ridge)⁻¹ (Q W/tr(QX) + ridge W) by Cholesky; False where B is not positive definite."""
    n, rank = w.shape
    ridge = 0.0
    for i in range(n):
        ridge += _RIDGE * b[i, i].real / n
    for i in range(n):
        for j in range(i + 1):
            total = b[i, j]
            for k in range(j):
                total -= factor[i, k] * factor[j, k].conjugate()
            if i > j:
                factor[i, j] = total / factor[j, j].real
            elif total.real + ridge > 0.0:
                factor[i, i] = complex(math.sqrt(total.real + ridge), 0.0)
            else:
                return False
    for c in range(rank):
        for i in range(n):
            total = ridge * w[i, c]
            for j in range(n):
                total += q[i, j] * w[j, c] / along
            for k in range(i):
                total -= factor[i, k] * out[k, c]
            out[i, c] = total / factor[i, i].real
        for i in range(n - 1, -1, -1):
            total = out[i, c]
            for k in range(i + 1, n):
                total -= factor[k, i].conjugate() * out[k, c]
            out[i, c] = total / factor[i, i].real
    return True
