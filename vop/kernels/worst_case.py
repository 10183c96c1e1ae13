"""Scanning all matrices once: finiteness, Frobenius norms, congruences."""

from __future__ import annotations

import math

import numpy as np
from numba import njit, prange

from vop.hermitian import pack_row, unpack_row
from vop.kernels.eigen import eigenvalues


@njit(cache=True, parallel=True, nogil=True, error_model="numpy")
def frobenius_norms(packed, gain, out):
    """Frobenius norms, (N,) float64, of packed float32 rows (N, n²); NaN or infinite rows give such.

    gain : (n²,) float64, :func:`vop.hermitian.inner_weights`.
    """
    for r in prange(packed.shape[0]):
        total = 0.0
        for p in range(packed.shape[1]):
            value = np.float64(packed[r, p])
            total += gain[p] * value * value
        out[r] = math.sqrt(total)


@njit(cache=True, nogil=True, error_model="numpy")
def largest_eigenvalue(row, n):
    """λmax of one packed row, float64, within a small multiple of n·2⁻⁵³·‖Q‖."""
    h = np.empty((n, n), dtype=np.complex128)
    d, f, tau = np.empty(n), np.empty(n), np.empty(n)
    unpack_row(row, n, h)
    eigenvalues(h, n, d, np.empty(n, dtype=np.complex128), f, tau)
    return d.max()


@njit(cache=True, parallel=True, nogil=True, error_model="numpy")
def congruence(packed, n, m, out):
    """out_r = pack(M Q_r Mᴴ) for packed rows (N, n²) of either float width; out (N, n²) float64."""
    for r in prange(packed.shape[0]):
        q = np.empty((n, n), dtype=np.complex128)
        half = np.empty((n, n), dtype=np.complex128)
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
