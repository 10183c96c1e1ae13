"""One small Hermitian matrix at a time, float64, fixed order of operations."""

from __future__ import annotations

from numba import njit


@njit(cache=True, nogil=True, error_model="numpy")
def is_positive(h, n):
    """Whether LDLᴴ of Hermitian ``h`` (n, n) complex128 runs through with positive pivots.

    Only the upper triangle is read; it is overwritten.
    """
    for j in range(n):
        d = h[j, j].real
        if not d > 0.0:
            return False
        inverse = 1.0 / d
        for i in range(j + 1, n):
            t = h[j, i].conjugate() * inverse
            t_re, t_im = t.real, t.imag
            for k in range(i, n):
                b = h[j, k]
                h[i, k] -= complex(t_re * b.real - t_im * b.imag, t_re * b.imag + t_im * b.real)
    return True
