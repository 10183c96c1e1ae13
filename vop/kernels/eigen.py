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
def _ql(n, d, f, z):
    """Eigenvalues of the real tridiagonal matrix (d, f) into d, eigenvectors into the rows of z (n, n).

    f[k] couples k and k + 1, f[n − 1] is scratch. Returns False if it did not converge.
    """
    for i in range(n):
        for k in range(n):
            z[i, k] = 0.0
        z[i, i] = 1.0
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
def _ql_values(n, d, e2):
    """Eigenvalues of the real tridiagonal matrix with diagonal d and squares e2 beside it, into d.

    The root-free QL iteration of Pal, Walker and Kahan (Parlett, The Symmetric Eigenvalue Problem, §8.15).
    e2[n − 1] is scratch, e2 is overwritten. Returns False if it did not converge.
    """
    e2[n - 1] = 0.0
    for l in range(n):  # noqa: E741 - the letter of the literature
        for turn in range(61):
            m = l
            while m < n - 1 and e2[m] > _U * _U * abs(d[m] * d[m + 1]):
                m += 1
            if m == l:
                break
            if turn == 60:
                return False
            root = math.sqrt(e2[l])
            sigma = (d[l + 1] - d[l]) / (2.0 * root)
            r = math.sqrt(sigma * sigma + 1.0)
            sigma = d[l] - root / (sigma + (r if sigma >= 0.0 else -r))
            c, s = 1.0, 0.0
            gamma = d[m] - sigma
            p = gamma * gamma
            for i in range(m - 1, l - 1, -1):
                square = e2[i]
                r = p + square
                if i < m - 1:
                    e2[i + 1] = s * r
                old_c, old_gamma = c, gamma
                c = p / r
                s = square / r
                gamma = c * (d[i] - sigma) - s * old_gamma
                d[i + 1] = old_gamma + (d[i] - gamma)
                p = gamma * gamma / c if c != 0.0 else old_c * square
            e2[l] = s * p
            d[l] = sigma + gamma
    return True


@njit(cache=True, nogil=True, error_model="numpy")
def _twisted_vector(n, d, f, value, up, down, row):
    """Unit eigenvector for an isolated eigenvalue ``value`` of the tridiagonal (d, f), into row (n,).

    From the factorisation twisted where its pivot is least (Dhillon & Parlett, Linear Algebra Appl
    2004;387:1). up, down : (n,) scratch.
    """
    tiny = 2.0**-500
    for i in range(n):
        pivot = d[i] - value
        if i > 0:
            pivot -= f[i - 1] * f[i - 1] / down[i - 1]
        down[i] = pivot if pivot != 0.0 else tiny
    best, twist = np.inf, 0
    for i in range(n - 1, -1, -1):
        pivot = d[i] - value
        if i < n - 1:
            pivot -= f[i] * f[i] / up[i + 1]
        up[i] = pivot if pivot != 0.0 else tiny
        gamma = abs(down[i] + up[i] - (d[i] - value))
        if gamma < best:
            best, twist = gamma, i
    row[twist] = 1.0
    square = 1.0
    for i in range(twist - 1, -1, -1):
        row[i] = -f[i] / down[i] * row[i + 1]
        square += row[i] * row[i]
    for i in range(twist + 1, n):
        row[i] = -f[i - 1] / up[i] * row[i - 1]
        square += row[i] * row[i]
    scale = 1.0 / math.sqrt(square)
    for i in range(n):
        row[i] *= scale


@njit(cache=True, nogil=True, error_model="numpy")
def add_positive_part(h, n, floor, z, real, vectors, e, v):
    """Add Σ λ v vᴴ over the eigenvalues λ > ``floor`` ≥ 0 of Hermitian h to the upper triangle of z.

    h, z : (n, n) complex128; only the lower triangle of h is read, and it is overwritten.
    real (7, n) float64, vectors (n, n) float64, e and v (n,) complex128 : scratch.

    Eigenvectors of eigenvalues with a neighbour within 10⁻⁵ of the norm come from the QL iteration, the
    others, faster, from a twisted factorisation; both to about 10⁻¹¹. Callers who need Z to dominate h
    check that. Returns False, and leaves z half done, where an iteration failed.
    """
    d, f, tau, values, e2, up, down = real[0], real[1], real[2], real[3], real[4], real[5], real[6]
    tridiagonalise(h, n, d, e, tau)
    for k in range(n - 1):
        e2[k] = e[k].real * e[k].real + e[k].imag * e[k].imag
        f[k] = math.sqrt(e2[k])
    for k in range(n):
        values[k] = d[k]
    if not _ql_values(n, values, e2):
        return False
    size, apart = 0.0, np.inf
    for j in range(n):
        size = max(size, abs(values[j]))
        if values[j] > floor:
            for k in range(n):
                if k != j:
                    apart = min(apart, abs(values[j] - values[k]))
    isolated = apart > 1e-5 * size
    if not isolated:
        for k in range(n):
            values[k] = d[k]
        if not _ql(n, values, f, vectors):
            return False
    for j in range(n):
        value = values[j]
        if not value > floor:
            continue
        if isolated:
            _twisted_vector(n, d, f, value, up, down, vectors[j])
        back_transform(h, n, e, tau, vectors[j], v)
        for i in range(n):
            scaled = value * v[i]
            for k in range(i, n):
                b = v[k]
                z[i, k] += complex(
                    scaled.real * b.real + scaled.imag * b.imag, scaled.imag * b.real - scaled.real * b.imag
                )
    return True


@njit(cache=True, nogil=True, error_model="numpy")
def eigensystem(h, n, d, e, f, tau, z):
    """Eigenvalues of Hermitian ``h`` (n, n) complex128 into d (n,) float64, unsorted; h is overwritten.

    The rows of z (n, n) receive eigenvectors of the tridiagonal matrix; :func:`back_transform` makes
    eigenvectors of h out of them. e (n,) complex128, f (n,) and tau (n,) float64 are needed for that, and
    otherwise scratch. NaN fills d if the iteration fails.
    """
    tridiagonalise(h, n, d, e, tau)
    for k in range(n - 1):
        f[k] = math.hypot(e[k].real, e[k].imag)
    if not _ql(n, d, f, z):
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
