"""Change of basis of packed matrices by a rectangular T, never below the exact result."""

from __future__ import annotations

import math

import numpy as np
from numba import njit, prange

from vop.hermitian import U64, pack_row, unpack_row


@njit(cache=True, parallel=True, nogil=True, error_model="numpy")
def congruence_outward(packed, n, t, out):
    """out_r = pack(TᴴQ_rT + D_r) ⪰ TᴴQ_rT, D_r ⪰ 0 diagonal and some n·2⁻⁵⁰ of |T|ᵀ|Q_r||T|.

    Two complex inner products of n terms err by less than η = 8(n + 4)·2⁻⁵³ of the same products of
    moduli (N. J. Higham, Accuracy and Stability of Numerical Algorithms, §3.6: √2γ per complex product
    and its sum). Q is positive semidefinite but for rounding, |q_kl| ≤ √(s_k s_l) with s_k = q_kk and a
    thousandth of the trace to spare, so that the moduli of row i sum to at most β_i Σ_j β_j,
    β_i = Σ_k |t_ki| √s_k; by Gershgorin η times that on the diagonal covers the error.

    packed : (N, n²), float32 or float64. t : (n, m) complex128, C-contiguous. out : (N, m²) float64.
    """
    m = t.shape[1]
    eta = 8.0 * (n + 4) * U64
    for r in prange(packed.shape[0]):
        q = np.empty((n, n), dtype=np.complex128)
        half = np.empty((n, m), dtype=np.complex128)
        result = np.empty((m, m), dtype=np.complex128)
        beta = np.zeros(m)
        unpack_row(packed[r], n, q)
        trace = 0.0
        for k in range(n):
            trace += q[k, k].real
        for k in range(n):
            root = math.sqrt(max(q[k, k].real, 0.0) + 1e-3 * max(trace, 0.0))
            for i in range(m):
                beta[i] += abs(t[k, i]) * root
                total = complex(0.0, 0.0)
                for p in range(n):
                    total += q[k, p] * t[p, i]
                half[k, i] = total
        spread = eta * beta.sum()
        for i in range(m):
            for j in range(i, m):
                total = complex(0.0, 0.0)
                for k in range(n):
                    total += t[k, i].conjugate() * half[k, j]
                result[i, j] = total
            result[i, i] = result[i, i].real + spread * beta[i]
        pack_row(result, m, out[r])
