"""Eigenvalues of small Hermitian matrices in a fixed order of operations, float64.

Householder reduction to a real tridiagonal matrix and the implicit QL iteration: Golub & Van Loan,
Matrix Computations, 4th ed., §8.3; the QL step with its shift after Bowdler, Martin, Reinsch and
Wilkinson, Numer Math 1968;11:293. Backward stable: computed eigenvalues are those of a matrix within
a small multiple of n·2⁻⁵³·‖H‖. Written here rather than called from LAPACK so that decisions do not
depend on which library, and how many of its threads, a machine has.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

_U = 2.0**-53


@njit(cache=True, nogil=True, error_model="numpy")
def tridiagonalise(h, n, d, e, tau):
    """Reduce Hermitian ``h`` (n, n) complex128 in place; only its lower triangle is read.

    d (n,) receives the real diagonal, e (n,) complex the subdiagonal (e[k] couples k and k + 1), and
    column k of h below the diagonal the Householder vector, with factor tau[k].
    """
    for k in range(n - 1):
        scale = 0.0
        for i in range(k + 1, n):
            scale += abs(h[i, k].real) + abs(h[i, k].imag)
        d[k] = h[k, k].real
        if k == n - 2 or scale == 0.0:
            # A single subdiagonal number may stay complex; phases are removed by real_subdiagonal.
            e[k] = h[k + 1, k]
            tau[k] = 0.0
            continue
        norm2 = 0.0
        for i in range(k + 1, n):
            x = h[i, k] / scale
            h[i, k] = x
            norm2 += x.real * x.real + x.imag * x.imag
        norm = math.sqrt(norm2)
        x = h[k + 1, k]
        size = math.sqrt(x.real * x.real + x.imag * x.imag)
        phase = x / size if size > 0.0 else complex(1.0, 0.0)
        e[k] = -phase * (norm * scale)
        h[k + 1, k] = x + phase * norm
        t = 1.0 / (norm * (norm + size))
        tau[k] = t
        # p = t·H v goes into e's unused tail; K = t/2 vᴴp; q = p − K v; H ← H − v qᴴ − q vᴴ.
        inner = 0.0
        for i in range(k + 1, n):
            p = complex(0.0, 0.0)
            for j in range(k + 1, i):
                p += h[i, j] * h[j, k]
            p += h[i, i].real * h[i, k]
            for j in range(i + 1, n):
                p += h[j, i].conjugate() * h[j, k]
            p *= t
            e[i] = p
            v = h[i, k]
            inner += v.real * p.real + v.imag * p.imag
        inner *= 0.5 * t
        for i in range(k + 1, n):
            e[i] -= inner * h[i, k]
        for j in range(k + 1, n):
            vj = h[j, k].conjugate()
            qj = e[j].conjugate()
            for i in range(j, n):
                h[i, j] -= h[i, k] * qj + e[i] * vj
    d[n - 1] = h[n - 1, n - 1].real


@njit(cache=True, nogil=True, error_model="numpy")
def _ql(n, d, f, z, vectors):
    """Eigenvalues of the real tridiagonal matrix (d, f) into d; rotations into z (n, n) if vectors.

    f[k] couples k and k + 1, f[n − 1] is scratch. Returns False if it did not converge.
    """
    f[n - 1] = 0.0
    for l in range(n):  # noqa: E741 - the letter of the literature
        for turn in range(61):
            m = l
            while m < n - 1:
                if abs(f[m]) <= _U * (abs(d[m]) + abs(d[m + 1])):
                    break
                m += 1
            if m == l:
                break
            if turn == 60:
                return False
            g = (d[l + 1] - d[l]) / (2.0 * f[l])
            r = math.hypot(g, 1.0)
            g = d[m] - d[l] + f[l] / (g + math.copysign(r, g))
            s, c, p = 1.0, 1.0, 0.0
            early = False
            for i in range(m - 1, l - 1, -1):
                b = c * f[i]
                a = s * f[i]
                r = math.hypot(a, g)
                f[i + 1] = r
                if r == 0.0:
                    d[i + 1] -= p
                    f[m] = 0.0
                    early = True
                    break
                s = a / r
                c = g / r
                g = d[i + 1] - p
                r = (d[i] - g) * s + 2.0 * c * b
                p = s * r
                d[i + 1] = g + p
                g = c * r - b
                if vectors:
                    for k in range(n):
                        a = z[i + 1, k]
                        z[i + 1, k] = s * z[i, k] + c * a
                        z[i, k] = c * z[i, k] - s * a
            if early:
                continue
            d[l] -= p
            f[l] = g
            f[m] = 0.0
    return True


@njit(cache=True, nogil=True, error_model="numpy")
def eigenvalues(h, n, d, e, f, tau):
    """Eigenvalues of Hermitian ``h`` (n, n) complex128 into d (n,) float64, unsorted; h is overwritten.

    e (n,) complex128, f (n,) and tau (n,) float64 are scratch. NaN fills d if the iteration fails.
    """
    tridiagonalise(h, n, d, e, tau)
    for k in range(n - 1):
        f[k] = math.hypot(e[k].real, e[k].imag)
    if not _ql(n, d, f, np.empty((0, 0)), False):
        for k in range(n):
            d[k] = np.nan


@njit(cache=True, nogil=True, error_model="numpy")
def eigensystem(h, n, d, e, f, tau, z):
    """As :func:`eigenvalues`, and the tridiagonal matrix's eigenvectors into the rows of z (n, n).

    :func:`back_transform` makes eigenvectors of h out of single rows of z.
    """
    tridiagonalise(h, n, d, e, tau)
    for k in range(n - 1):
        f[k] = math.hypot(e[k].real, e[k].imag)
    for i in range(n):
        for j in range(n):
            z[i, j] = 0.0
        z[i, i] = 1.0
    if not _ql(n, d, f, z, True):
        for k in range(n):
            d[k] = np.nan


@njit(cache=True, nogil=True, error_model="numpy")
def back_transform(h, n, e, tau, row, out):
    """The eigenvector of the matrix that :func:`eigensystem` reduced, from a row of its z, into out (n,)."""
    phase = complex(1.0, 0.0)
    out[0] = complex(row[0], 0.0)
    for k in range(n - 1):
        size = math.hypot(e[k].real, e[k].imag)
        if size > 0.0:
            phase *= e[k] / size
        out[k + 1] = phase * row[k + 1]
    for k in range(n - 3, -1, -1):
        t = tau[k]
        if t == 0.0:
            continue
        inner = complex(0.0, 0.0)
        for i in range(k + 1, n):
            inner += h[i, k].conjugate() * out[i]
        inner *= t
        for i in range(k + 1, n):
            out[i] -= inner * h[i, k]
