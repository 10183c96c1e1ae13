"""Positive semidefiniteness proved in floating point: a Cholesky factorisation shifted down.

After S. M. Rump, Verification of positive definiteness, BIT Numer Math 2006;46:433–452. The
constants are derived here for complex arithmetic made of real operations, with u = 2⁻⁵³ and
γ_k = ku/(1−ku) (Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed., ch. 3 and 10):

*Factorisation.* Real and imaginary part of every entry are inner products of at most 2n real
products and one quotient, so that the computed factor L of a matrix H fulfils LLᴴ = H + Δ with
|Re Δ_ij|, |Im Δ_ij| ≤ γ_{2n+4} Σ_k |l_ik||l_jk| in whatever order the sums are taken. With l_i the
i-th row of L, |Δ_ij| ≤ √2 γ ‖l_i‖‖l_j‖, and ‖l_i‖² ≤ h_ii/(1−γ) from the diagonal; the matrix of
‖l_i‖‖l_j‖ has rank one, whence ‖Δ‖₂ ≤ √2 γ/(1−γ) tr H ≤ 2 γ_{2n+4} tr H for n ≤ 2⁴⁰.

*Combination.* m̂ = fl(Σ c_k a_k + e − q), with T terms beside q, e itself rounded once: each real
number errs by at most γ_{T+2}(Σ c_k|a_k| + |e| + |q|), hence, with ⟦A⟧ the largest modulus of
A's real numbers, the matrix by at most n √2 γ_{T+2} (Σ c_k⟦A_k⟧ + ⟦E⟧ + ⟦Q⟧) in norm.

*Shift.* Subtracting s from the diagonal rounds by at most u times what remains, 2u tr M̂ is ample.

*Underflow.* No sum errs when it underflows; products, quotients and roots err by at most 2⁻¹⁰²² each
(even where results are flushed to zero), of which fewer than 4n + 2T + 8 enter one entry; a
quotient's counts times the pivot, itself below 1 + tr M̂.

So if the factorisation of fl(M̂ − s1) runs through with s ≥ t + all of these, then M ⪰ t·1.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from vop.hermitian import unpack_row

_U = 2.0**-53
_TINY = 2.0**-1022
#: Covers the rounding of the bound's own evaluation, a few dozen operations, thousands of times over.
_SLACK = 1.0 + 1e-9
_ROOT_TWO = 1.4142135623730951 * (1.0 + 2.0**-50)


@njit(cache=True, nogil=True, error_model="numpy")
def _gamma(k):
    return k * _U / (1.0 - k * _U)


@njit(cache=True, nogil=True, error_model="numpy")
def largest_entry(row):
    """Largest modulus ⟦A⟧ of the real numbers of a packed row; NaN where one is NaN."""
    largest = 0.0
    for value in row:
        modulus = abs(np.float64(value))
        if not modulus <= largest:
            largest = modulus
        if modulus != modulus:
            return np.nan
    return largest


@njit(cache=True, nogil=True, error_model="numpy")
def shift_bound(trace, entries, n, terms):
    """Upper bound of everything that rounding can hide (module docstring).

    trace : Σ max(m̂_ii, 0); entries : Σ c_k⟦A_k⟧ + ⟦E⟧ + ⟦Q⟧; terms : T, matrices beside Q.
    """
    factorisation = 2.0 * _gamma(2.0 * n + 4.0) * trace + 2.0 * _U * trace
    combination = n * _ROOT_TWO * _gamma(terms + 2.0) * entries
    underflow = 4.0 * n * (4.0 * n + 2.0 * terms + 8.0) * (1.0 + trace) * _TINY
    return (factorisation + combination + underflow) * _SLACK


@njit(cache=True, nogil=True, error_model="numpy")
def expand(row, n, out):
    """``unpack_row`` as a call: inlined at each of its many places here it would compile for a minute."""
    unpack_row(row, n, out)


@njit(cache=True, nogil=True, error_model="numpy")
def cholesky(h, n, shift, factor):
    """Factorise H − shift·1 into the lower triangle of ``factor``.

    h, factor : (n, n) complex128; only the lower triangle of h is read.

    Returns
    -------
    n where it ran through, else the column of the first pivot that is not positive (or NaN); the
    rows of ``factor`` up to and including that one are complete left of the diagonal.
    """
    for i in range(n):
        for j in range(i):
            re = h[i, j].real
            im = h[i, j].imag
            for k in range(j):
                a = factor[i, k]
                b = factor[j, k]
                re -= a.real * b.real
                re -= a.imag * b.imag
                im -= a.imag * b.real
                im += a.real * b.imag
            pivot = factor[j, j].real
            factor[i, j] = complex(re / pivot, im / pivot)
        d = h[i, i].real - shift
        for k in range(i):
            a = factor[i, k]
            d -= a.real * a.real
            d -= a.imag * a.imag
        if not (d > 0.0 and d < np.inf):
            return i
        factor[i, i] = complex(math.sqrt(d), 0.0)
    return n


@njit(cache=True, nogil=True, error_model="numpy")
def combine(target, extra, columns, index, weight, n, out):
    """out = Σ weight·column + extra − target, packed float64; returns ``entries`` of :func:`shift_bound`."""
    width = n * n
    entries = largest_entry(target) + largest_entry(extra)
    for p in range(width):
        out[p] = extra[p] - np.float64(target[p])
    for t in range(index.shape[0]):
        column = columns[index[t]]
        c = weight[t]
        entries += c * largest_entry(column)
        for p in range(width):
            out[p] += c * np.float64(column[p])
    return entries


@njit(cache=True, nogil=True, error_model="numpy")
def positive_trace(h, n):
    """Σ max(h_ii, 0), the ``trace`` of :func:`shift_bound`."""
    trace = 0.0
    for i in range(n):
        trace += max(h[i, i].real, 0.0)
    return trace


@njit(cache=True, nogil=True, error_model="numpy")
def certify(targets, extra, columns, starts, index, weight, n, proved):
    """Prove Σ_t weight_t·columns[index_t] + extra ⪰ target for each target; decide nothing else.

    Parameters
    ----------
    targets : (R, n²) float32, packed. extra : (n²,) float64, packed, rounded once.
    columns : (C, n²) float32, packed.
    starts : (R + 1,) int64; target r uses the terms starts[r] … starts[r+1] of ``index``, int64, and
        ``weight``, float64, which are taken as exact.
    proved : (R,) bool, written.

    Returns
    -------
    (margin, row) : margin is a *proved* lower bound of the least eigenvalue of Σ + extra − target
    over all proved rows (∞ if none), within about 2 % of it; row attains it.
    """
    h = np.empty((n, n), dtype=np.complex128)
    factor = np.empty((n, n), dtype=np.complex128)
    packed = np.empty(n * n)
    extra_is_zero = largest_entry(extra) == 0.0
    margin, margin_row = np.inf, -1
    for r in range(targets.shape[0]):
        first, last = starts[r], starts[r + 1]
        if first == last:
            proved[r] = False
            continue
        entries = combine(targets[r], extra, columns, index[first:last], weight[first:last], n, packed)
        expand(packed, n, h)
        trace = positive_trace(h, n)
        base = shift_bound(trace, entries, n, float(last - first + 1))
        if margin < np.inf and cholesky(h, n, (base + margin) * _SLACK, factor) == n:
            proved[r] = True
            continue
        if cholesky(h, n, base, factor) < n:
            # A difference of two numbers is zero only if they are equal: no shift is needed then.
            proved[r] = (
                extra_is_zero and last - first == 1 and weight[first] == 1.0 and largest_entry(packed) == 0.0
            )
            if proved[r] and margin > 0.0:
                margin, margin_row = 0.0, r
            continue
        proved[r] = True
        margin, margin_row = _least(h, n, base, min(margin, trace), factor), r
    return margin, margin_row


@njit(cache=True, nogil=True, error_model="numpy")
def _least(h, n, base, high, factor):
    low = high * 0.0625
    while low > 0.0 and cholesky(h, n, (base + low) * _SLACK, factor) < n:
        high = low
        low = low * 0.0625 if low > 1e-6 * base else 0.0
    for _ in range(10):
        middle = 0.5 * (low + high)
        if cholesky(h, n, (base + middle) * _SLACK, factor) == n:
            low = middle
        else:
            high = middle
    return low


@njit(cache=True, nogil=True, error_model="numpy")
def keeps_small_numbers(least_double, least_single):
    """Whether this thread computes with subnormal numbers; pass 2⁻¹⁰²² and float32(2⁻¹²⁶)."""
    half = np.float32(least_single * np.float32(0.5))
    return least_double * 0.5 > 0.0 and np.float64(half) > 0.0
