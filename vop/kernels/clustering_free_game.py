"""Matrix games by the simplex method: the best mixture of columns against the worst of many cuts.

A *cut* is a covariance X_i of unit trace, a *column* a matrix V_j, and ``values[i, j]`` = tr(V_j X_i). For
a target T with ``asked[i]`` = tr(T X_i) the game is

    max over c, min over i of  Σ_j c_j values[i, j] − asked[i],       c in the simplex,

and its dual, min over μ of max_j Σ_i μ_i values[i, j] − Σ_i μ_i asked[i]. A negative value of any μ shows
that Σ_i μ_i X_i is a witness against T. The feasible set of the dual does not depend on T: a vertex that
was best for one target is a start for the next, and stays feasible when cuts are added. So the simplex
method walks on the dual from wherever it was (Chvátal, Linear Programming, 1983, ch. 10 and 15). A
vertex is given by as many cuts (μ > 0) as columns (c ≠ 0); that system is small, and factorised anew in
every step, so that no error accumulates.

Numbers are of order 1: callers divide by the worst case. What comes out is a proposal.
"""

from __future__ import annotations

import numpy as np
from numba import njit

#: Outcomes of :func:`play`.
SOLVED, STOPPED, SINGULAR = 0, 1, 2

#: Most cuts of a vertex; n² suffice in exact arithmetic, and a few dozen are met.
MOST = 160
#: A cut counts as violated, a weight as negative beyond this.
_CUT, _WEIGHT = 1e-12, 1e-11
#: A direction below this does not move.
_FLAT = 1e-13
#: After so many steps without progress the first candidate is taken instead of the best (Bland's rule).
_PATIENCE = 30


@njit(cache=True, nogil=True, error_model="numpy")
def factorise(square, size, pivots):
    """LU factorisation with partial pivoting in place; whether all pivots are clear of zero."""
    for k in range(size):
        best, at = abs(square[k, k]), k
        for i in range(k + 1, size):
            if abs(square[i, k]) > best:
                best, at = abs(square[i, k]), i
        pivots[k] = at
        if not best > 1e-13:
            return False
        if at != k:
            for j in range(size):
                square[k, j], square[at, j] = square[at, j], square[k, j]
        inverse = 1.0 / square[k, k]
        for i in range(k + 1, size):
            factor = square[i, k] * inverse
            square[i, k] = factor
            if factor != 0.0:
                for j in range(k + 1, size):
                    square[i, j] -= factor * square[k, j]
    return True


@njit(cache=True, nogil=True, error_model="numpy")
def solve(square, size, pivots, x):
    """x ← square⁻¹ x from :func:`factorise`."""
    for k in range(size):
        x[k], x[pivots[k]] = x[pivots[k]], x[k]
    for i in range(size):
        for j in range(i):
            x[i] -= square[i, j] * x[j]
    for i in range(size - 1, -1, -1):
        for j in range(i + 1, size):
            x[i] -= square[i, j] * x[j]
        x[i] /= square[i, i]


@njit(cache=True, nogil=True, error_model="numpy")
def solve_transposed(square, size, pivots, x):
    """x ← square⁻ᵀ x from :func:`factorise`."""
    for i in range(size):
        for j in range(i):
            x[i] -= square[j, i] * x[j]
        x[i] /= square[i, i]
    for i in range(size - 1, -1, -1):
        for j in range(i + 1, size):
            x[i] -= square[j, i] * x[j]
    for k in range(size - 1, -1, -1):
        x[k], x[pivots[k]] = x[pivots[k]], x[k]


@njit(cache=True, nogil=True, error_model="numpy")
def begin(values, asked, n_cuts, n_columns, cuts, columns, cut_in, column_in):
    """Put the vertex of one cut and its best column in place of any other: the cut of least value."""
    for i in range(cut_in.shape[0]):
        cut_in[i] = False
    for j in range(n_columns):
        column_in[j] = False
    least, at, best_at = np.inf, 0, 0
    for i in range(n_cuts):
        best = 0
        for j in range(1, n_columns):
            if values[i, j] > values[i, best]:
                best = j
        if values[i, best] - asked[i] < least:
            least, at, best_at = values[i, best] - asked[i], i, best
    cuts[0], columns[0] = at, best_at
    cut_in[at], column_in[best_at] = True, True
    return 1


@njit(cache=True, nogil=True, error_model="numpy")
def play(
    values,
    values_t,
    asked,
    n_cuts,
    n_columns,
    size,
    cuts,
    columns,
    cut_in,
    column_in,
    mixture,
    weights,
    square,
    pivots,
    along,
    slack,
    rate,
    most_steps,
):
    """Walk from the vertex given by ``cuts`` and ``columns`` to the best one.

    Parameters
    ----------
    values : (C, K) float64; values_t : (≥ K, C), its transpose. asked : (C,).
    n_cuts, n_columns : how many of them are in use.
    size, cuts, columns, cut_in, column_in : the vertex; changed.
    mixture : (MOST + 1,) written: μ of ``cuts``. weights : (MOST + 1,) written: c of ``columns``.
    square (MOST + 1, MOST + 1), pivots, along, slack (C or K), rate (C or K) : scratch.

    Returns
    -------
    outcome, size, upper : value of μ, an upper bound of the game's value in any case but SINGULAR.
    """
    steps, still, last = 0, 0, np.inf
    while True:
        for r in range(size):
            row = columns[r]
            for k in range(size):
                square[r, k] = values_t[row, cuts[k]]
            square[r, size] = -1.0
            square[size, r] = 1.0
        square[size, size] = 0.0
        if not factorise(square, size + 1, pivots):
            return SINGULAR, size, np.inf
        for k in range(size):
            mixture[k] = 0.0
            weights[k] = asked[cuts[k]]
        mixture[size], weights[size] = 1.0, -1.0
        solve(square, size + 1, pivots, mixture)
        solve_transposed(square, size + 1, pivots, weights)
        level, value = mixture[size], -weights[size]
        if size == MOST:
            return STOPPED, size, value
        if value < last - 1e-14:
            last, still = value, 0
        else:
            still += 1

        for i in range(n_cuts):
            slack[i] = -asked[i] - value
        for r in range(size):
            c, row = weights[r], columns[r]
            for i in range(n_cuts):
                slack[i] += c * values_t[row, i]
        cut, most = -1, -_CUT
        for i in range(n_cuts):
            if slack[i] < most and not cut_in[i]:
                cut, most = i, slack[i]
                if still > _PATIENCE:
                    break
        place, least = -1, -_WEIGHT
        for r in range(size):
            if weights[r] < least and (still <= _PATIENCE or place < 0 or columns[r] < columns[place]):
                place = r
                if still <= _PATIENCE:
                    least = weights[r]
        if cut < 0 and place < 0:
            return SOLVED, size, value
        if steps == most_steps:
            return STOPPED, size, value
        steps += 1
        if cut >= 0 and place >= 0:
            # Bland's order: columns before cuts. Otherwise by turns; both lower the value.
            if still > _PATIENCE or steps % 2 == 0:
                cut = -1
            else:
                place = -1

        for r in range(size):
            along[r] = -values_t[columns[r], cut] if cut >= 0 else 0.0
        along[size] = -1.0 if cut >= 0 else 0.0
        if cut < 0:
            along[place] = -1.0
        solve(square, size + 1, pivots, along)
        for j in range(n_columns):
            slack[j], rate[j] = level, along[size]
        for k in range(size):
            m, d, row = mixture[k], along[k], cuts[k]
            for j in range(n_columns):
                slack[j] -= m * values[row, j]
                rate[j] -= d * values[row, j]
        if cut >= 0:
            for j in range(n_columns):
                rate[j] -= values[cut, j]
        length, leaving, joining = np.inf, -1, -1
        for k in range(size):
            if along[k] < -_FLAT:
                reach = max(mixture[k], 0.0) / -along[k]
                if reach < length:
                    length, leaving = reach, k
        for j in range(n_columns):
            if rate[j] < -_FLAT and not column_in[j]:
                reach = max(slack[j], 0.0) / -rate[j]
                if reach < length:
                    length, leaving, joining = reach, -1, j
        if leaving < 0 and joining < 0:
            return SINGULAR, size, np.inf

        if cut >= 0:
            if leaving >= 0:
                cut_in[cuts[leaving]] = False
                cuts[leaving] = cut
            else:
                cuts[size], columns[size] = cut, joining
                column_in[joining] = True
                size += 1
            cut_in[cut] = True
        else:
            column_in[columns[place]] = False
            if leaving >= 0:
                size -= 1
                cut_in[cuts[leaving]] = False
                cuts[leaving], columns[place] = cuts[size], columns[size]
            else:
                columns[place] = joining
                column_in[joining] = True
