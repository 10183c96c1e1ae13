"""Local maximisation of tr(Q X)/max_k tr(A_k X) over X = W Wᴴ, many starts; proposes, decides nothing.

At a maximum Q W = λ B W, where B is a convex combination of the A_k that attain the denominator. Each
step takes the combination of those that nearly attain it (weights (s_k/max s)^p), averages it with the
earlier ones (fictitious play: an oscillation between VOPs settles), and moves W to B⁻¹QW, a power
iteration of that pencil.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from vop.hermitian import pack_row, unpack_row

#: VOPs below this share of the largest value take no weight.
_NEAR = 0.7
#: Exponents, from smooth to sharp.
_SOFT, _SHARP = 16.0, 1024.0


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
    f = np.empty(width)
    mixed = np.empty(width)
    mean = np.empty(width)
    values = np.empty(n_columns)
    for s in range(n_starts):
        unpack_row(rows[s], n, q)
        w[:] = start[s]
        best[s] = w
        ratio[s] = np.inf
        for p in range(width):
            mean[p] = 0.0
        for step in range(steps):
            _normalise(w)
            for i in range(n):
                for j in range(i, n):
                    total = 0.0j
                    for c in range(rank):
                        total += w[i, c] * w[j, c].conjugate()
                    square[i, j] = total
            pack_row(square, n, f)
            along = 0.0
            for p in range(width):
                f[p] *= gain[p]
                along += f[p] * np.float64(rows[s, p])
            for k in range(n_columns):
                values[k] = 0.0
            for p in range(width):
                c = f[p]
                line = columns_t[p]
                for k in range(n_columns):
                    values[k] += c * line[k]
            top = values.max()
            if not (top > 0.0 and along > 0.0):
                break
            if top / along < ratio[s]:
                ratio[s] = top / along
                best[s] = w
            # Weights of the VOPs that nearly attain the maximum, and their combination B.
            power = _SOFT * (_SHARP / _SOFT) ** (step / max(steps - 1, 1))
            for p in range(width):
                mixed[p] = 0.0
            total = 0.0
            for k in range(n_columns):
                share = values[k] / top
                if share > _NEAR:
                    share = math.exp(power * math.log(share))
                    if share > 1e-4:
                        total += share
                        column = columns[k]
                        for p in range(width):
                            mixed[p] += share * np.float64(column[p])
            blend = max(0.08, 1.0 / (step + 1.0))
            for p in range(width):
                mean[p] += blend * (mixed[p] / (total * top) - mean[p])
            unpack_row(mean, n, b)
            if not _solve(b, q, w, square):
                break


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
def _solve(b, q, w, factor):
    """w ← B⁻¹ Q w by Cholesky; False where B is not positive definite."""
    n, rank = w.shape
    ridge = 0.0
    for i in range(n):
        ridge += 1e-12 * b[i, i].real
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
    y = np.empty(n, dtype=np.complex128)
    for c in range(rank):
        for i in range(n):
            total = 0.0j
            for j in range(n):
                total += q[i, j] * w[j, c]
            y[i] = total
        for i in range(n):
            for k in range(i):
                y[i] -= factor[i, k] * y[k]
            y[i] /= factor[i, i].real
        for i in range(n - 1, -1, -1):
            for k in range(i + 1, n):
                y[i] -= factor[k, i].conjugate() * y[k]
            y[i] /= factor[i, i].real
        for i in range(n):
            w[i, c] = y[i]
    return True
