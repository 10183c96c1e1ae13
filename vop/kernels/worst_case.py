"""Passes over all matrices: Frobenius norms, congruences."""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from vop.hermitian import pack_row, unpack_row


@njit(cache=True, nogil=True, error_model="numpy")
def frobenius_norms(packed, gain, first, last, out):
    """Frobenius norms of rows first … last − 1 of ``packed`` (N, n²) float32 into ``out`` (N,).

    gain : (n²,) float64, :func:`vop.hermitian.inner_weights`. NaN or infinity in a row gives such.
    """
    for r in range(first, last):
        total = 0.0
        for p in range(packed.shape[1]):
            value = np.float64(packed[r, p])
            total += gain[p] * value * value
        out[r] = math.sqrt(total)


@njit(cache=True, nogil=True, error_model="numpy")
def congruence(packed, n, m, out):
    """out_r = pack(M Q_r Mᴴ) for packed rows (R, n²) float64; out (R, n²) float64 may be ``packed``."""
    q = np.empty((n, n), dtype=np.complex128)
    half = np.empty((n, n), dtype=np.complex128)
    for r in range(packed.shape[0]):
        unpack_row(packed[r], n, q)
        for i in range(n):
            for j in range(n):
                total = complex(0.0, 0.0)
                for k in range(n):
                    total += m[i, k] * q[k, j]
                half[i, j] = total
        for i in range(n):
            for j in range(i, n):
                total = complex(0.0, 0.0)
                for k in range(n):
                    total += half[i, k] * m[j, k].conjugate()
                q[i, j] = total
        pack_row(q, n, out[r])
