"""One small Hermitian matrix at a time, float64, fixed order of operations."""

from __future__ import annotations

import numpy as np
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


@njit(cache=True, nogil=True, error_model="numpy")
def smallest_root(n, d, e2):
    """Least eigenvalue of the real symmetric tridiagonal matrix with diagonal d and squares e2 beside it.

    Laguerre's iteration from a Gershgorin bound on the left climbs monotonically to the least root of a
    polynomial with real roots only (Wilkinson, The Algebraic Eigenvalue Problem, 1965, ch. 7). The
    derivatives come from the ratios q_i of leading minors, which are positive left of the root. A step
    never passes the root but by rounding, so that a ratio that is not positive says: it is reached.
    """
    low, scale = np.inf, 0.0
    for i in range(n):
        radius = 0.0
        if i > 0:
            radius += np.sqrt(e2[i - 1])
        if i < n - 1:
            radius += np.sqrt(e2[i])
        low = min(low, d[i] - radius)
        scale = max(scale, abs(d[i]) + radius)
    # A start just below the bound: on it, a diagonal matrix would give q = 0 at once.
    x = low - 2.0**-50 * scale
    for _ in range(60):
        first, second = 0.0, 0.0
        q, r, s = 1.0, 0.0, 0.0
        for i in range(n):
            t = e2[i - 1] / q if i > 0 else 0.0
            q_new = (d[i] - x) - t
            if not q_new > 0.0:
                return x
            # r = q'/q, s = q''/q of the previous row, then of this one.
            s = t * (s - 2.0 * r * r) / q_new
            r = (t * r - 1.0) / q_new
            q = q_new
            first -= r
            second += r * r - s
        root = (n - 1.0) * (n * second - first * first)
        step = n / (first + np.sqrt(max(root, 0.0)))
        if not step > 2.0**-51 * scale:
            return x + step
        x += step
    return x
