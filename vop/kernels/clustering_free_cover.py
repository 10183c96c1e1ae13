"""Is a matrix below some mixture of the cores plus the bound? Decided for many matrices, one by one.

For a target Q the question is whether some c in the simplex has M = Σ c_j V_j + ε'1 − Q ⪰ 0. By minimax
there is none exactly if some covariance X has tr(QX) > max_j tr(V_j X) + ε' tr X, a *witness*. Cutting
planes find one or the other (Kelley, J SIAM 1960;8:703): the game of :mod:`.clustering_free_game` over
all cuts known so far gives c and a witness; if M is positive semidefinite the target is covered, if the
game is lost it is not, and otherwise eigenvectors of M with negative eigenvalues are new cuts. Cuts found
for one target serve the next, and so does the vertex of the game.

Most targets need none of that: a mixture that covered one of them covers its neighbours. Mixtures are
remembered, the latest first, and tried sixteen targets abreast.

Every "covered" is an elimination with positive pivots in float64; all else only proposes.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from vop.hermitian import pack_row, unpack_row
from vop.kernels.cholesky import is_positive
from vop.kernels.clustering_free_game import MOST, SINGULAR, begin, play
from vop.kernels.eigen import back_transform, eigensystem
from vop.kernels.lanes import LANES, lane_buffer_size, positive_lanes, subtract_rows

#: What is known of a target.
UNTESTED, REMEMBERED, COVERED, OPEN, UNDECIDED = 0, 1, 2, 3, 4

#: Mixtures that are remembered, rounds of cutting planes, cuts of a round, steps of a game.
_REMEMBER, _ROUNDS, _AT_ONCE, _STEPS = 48, 60, 3, 1000
#: A witness is deepened until it is so near the best, relative, or for so many rounds after the first.
_NEAR, _DEEPEN = 0.1, 4


@njit(cache=True, nogil=True, error_model="numpy")
def unpacked(row, n, out):
    """``unpack_row`` as a call: inlined at each of its places it would compile for long."""
    unpack_row(row, n, out)


@njit(cache=True, nogil=True, error_model="numpy")
def values_on(rows_t, functional, n_rows, out):
    """out[k] = Σ_p rows_t[p, k] functional[p] for k < n_rows; fixed order."""
    for k in range(n_rows):
        out[k] = 0.0
    for p in range(functional.shape[0]):
        f = functional[p]
        for k in range(n_rows):
            out[k] += f * rows_t[p, k]


@njit(cache=True, nogil=True, error_model="numpy")
def _tried(minuend, packed, rows, status, waiting, n_waiting, n, positions, lanes, index):
    """Mark those of ``waiting`` below ``minuend`` REMEMBERED; the others stay, and are counted."""
    for lane in range(LANES):
        index[lane] = rows[waiting[min(lane, n_waiting - 1)]]
    subtract_rows(lanes, positions, minuend, packed, index)
    mask = positive_lanes(lanes, n)
    left = 0
    for lane in range(n_waiting):
        if (mask >> lane) & 1:
            status[waiting[lane]] = REMEMBERED
        else:
            waiting[left] = waiting[lane]
            left += 1
    return left


@njit(cache=True, nogil=True, error_model="numpy")
def _append_cut(cuts_t, n_cuts, values, values_t, columns_t, n_columns, cut):
    for p in range(cut.shape[0]):
        cuts_t[p, n_cuts] = cut[p]
    row = values[n_cuts]
    values_on(columns_t, cut, n_columns, row)
    for j in range(n_columns):
        values_t[j, n_cuts] = row[j]


@njit(cache=True, nogil=True, error_model="numpy")
def _rank_one(x, n, gain, square, out):
    for a in range(n):
        for b in range(n):
            square[a, b] = x[a] * x[b].conjugate()
    pack_row(square, n, out)
    for p in range(n * n):
        out[p] *= gain[p]


@njit(cache=True, nogil=True, error_model="numpy")
def examine(
    packed,
    rows,
    columns_t,
    scale,
    bound,
    slack_allowed,
    n,
    gain,
    one,
    positions,
    cuts,
    first,
    most_cuts,
    most,
):
    """Decide for each target whether it is covered, until ``most`` are not.

    Parameters
    ----------
    packed : (N, n²) float32. rows : (R,) int64, the targets.
    columns_t : (n², K) float64, cores divided by ``scale`` (worst case), transposed.
    bound : ε', slack_allowed : covered means ⪰ −slack_allowed·1; both divided by ``scale``.
    gain, one : packed inner weights and identity. positions : of lanes.
    cuts : (C, n²) float64, functionals of unit trace to begin with; first : (C, K), their values.
    most_cuts : cuts kept at a time.

    Returns
    -------
    status : (R,) int8, UNTESTED … UNDECIDED.
    which : (W,) positions in ``rows`` of those OPEN or UNDECIDED; witness : (W, n²) functionals of unit
    trace; excess : (W,), by how much each exceeds, divided by scale; may be negative if UNDECIDED.
    new : (M, n²) cuts of rank one found on the way, the last ``most_cuts`` of them at most.
    """
    width, n_columns, n_rows = n * n, columns_t.shape[1], rows.shape[0]
    status = np.zeros(n_rows, dtype=np.int8)
    which = np.empty(min(most, n_rows), dtype=np.int64)
    witness = np.zeros((which.shape[0], width))
    excess = np.empty(which.shape[0])
    n_open = 0

    n_first = cuts.shape[0]
    capacity = most_cuts + _AT_ONCE
    cuts_t = np.empty((width, capacity))
    values = np.empty((capacity, n_columns))
    values_t = np.empty((n_columns, capacity))
    for i in range(n_first):
        for p in range(width):
            cuts_t[p, i] = cuts[i, p]
        for j in range(n_columns):
            values[i, j] = first[i, j]
            values_t[j, i] = first[i, j]
    n_cuts, size = n_first, 0
    asked = np.empty(capacity)
    chosen_cuts, chosen = np.zeros(MOST + 1, dtype=np.int64), np.zeros(MOST + 1, dtype=np.int64)
    cut_in, column_in = np.zeros(capacity, dtype=np.bool_), np.zeros(n_columns, dtype=np.bool_)
    mixture, weights, along = np.empty(MOST + 1), np.empty(MOST + 1), np.empty(MOST + 1)
    square, pivots = np.empty((MOST + 1, MOST + 1)), np.empty(MOST + 1, dtype=np.int64)
    spare, rate = np.empty(max(capacity, n_columns)), np.empty(max(capacity, n_columns))

    lanes = np.zeros(lane_buffer_size(n))
    index, waiting = np.empty(LANES, dtype=np.int64), np.empty(LANES, dtype=np.int64)
    remembered, order, n_remembered = np.empty((_REMEMBER, width)), np.arange(_REMEMBER), 0

    h, outer = np.empty((n, n), dtype=np.complex128), np.empty((n, n), dtype=np.complex128)
    target, mix, cut = np.empty(width), np.empty(width), np.empty(width)
    d, f, tau, z = np.empty(n), np.empty(n), np.empty(n), np.empty((n, n))
    e, x = np.empty(n, dtype=np.complex128), np.empty(n, dtype=np.complex128)

    for begin_block in range(0, n_rows, LANES):
        n_waiting = min(LANES, n_rows - begin_block)
        for lane in range(n_waiting):
            waiting[lane] = begin_block + lane
        for place in range(n_remembered):
            slot = order[place]
            before = n_waiting
            n_waiting = _tried(
                remembered[slot], packed, rows, status, waiting, n_waiting, n, positions, lanes, index
            )
            if n_waiting < before:
                for k in range(place, 0, -1):
                    order[k] = order[k - 1]
                order[0] = slot
            if n_waiting == 0:
                break
        while n_waiting > 0:
            at = waiting[0]
            n_waiting -= 1
            for k in range(n_waiting):
                waiting[k] = waiting[k + 1]
            if n_open == which.shape[0]:
                return status, which, witness, excess, cuts_t[:, n_first:n_cuts].T.copy()
            for p in range(width):
                target[p] = np.float64(packed[rows[at], p]) / scale - bound * one[p]
            if n_cuts + _ROUNDS * _AT_ONCE > most_cuts:
                # Enough of them: only those of the vertex and the newest half are kept.
                n_cuts = _forget(cuts_t, values, values_t, n_first, n_cuts, n_columns)
                size = 0
            values_on(cuts_t, target, n_cuts, asked)
            if size == 0:
                size = begin(values, asked, n_cuts, n_columns, chosen_cuts, chosen, cut_in, column_in)
            upper, lower, deepened, again = np.inf, -np.inf, 0, True
            status[at] = UNDECIDED
            for _ in range(_ROUNDS):
                outcome, size, value = play(
                    values,
                    values_t,
                    asked,
                    n_cuts,
                    n_columns,
                    size,
                    chosen_cuts,
                    chosen,
                    cut_in,
                    column_in,
                    mixture,
                    weights,
                    square,
                    pivots,
                    along,
                    spare,
                    rate,
                    _STEPS,
                )
                if outcome == SINGULAR:
                    size = begin(values, asked, n_cuts, n_columns, chosen_cuts, chosen, cut_in, column_in)
                    if again:
                        again = False
                        continue
                    break
                if value < upper:
                    upper = value
                    for p in range(width):
                        cut[p] = 0.0
                    for k in range(size):
                        for p in range(width):
                            cut[p] += max(mixture[k], 0.0) * cuts_t[p, chosen_cuts[k]]
                    if n_open < which.shape[0]:
                        for p in range(width):
                            witness[n_open, p] = cut[p]
                total = 0.0
                for r in range(size):
                    weights[r] = max(weights[r], 0.0)
                    total += weights[r]
                for p in range(width):
                    mix[p] = -target[p]
                for r in range(size):
                    c = weights[r] / total
                    for p in range(width):
                        mix[p] += c * columns_t[p, chosen[r]]
                for p in range(width):
                    mix[p] += slack_allowed * one[p]
                unpacked(mix, n, h)
                if is_positive(h, n):
                    status[at] = COVERED
                    slot = order[min(n_remembered, _REMEMBER - 1)]
                    for k in range(min(n_remembered, _REMEMBER - 1), 0, -1):
                        order[k] = order[k - 1]
                    order[0] = slot
                    n_remembered = min(n_remembered + 1, _REMEMBER)
                    for p in range(width):
                        remembered[slot, p] = scale * (mix[p] + target[p] + bound * one[p])
                    if n_waiting > 0:
                        n_waiting = _tried(
                            remembered[slot],
                            packed,
                            rows,
                            status,
                            waiting,
                            n_waiting,
                            n,
                            positions,
                            lanes,
                            index,
                        )
                    break
                unpacked(mix, n, h)
                eigensystem(h, n, d, e, f, tau, z)
                least = np.inf
                for k in range(n):
                    least = min(least, d[k])
                lower = max(lower, least - slack_allowed)
                if upper < -slack_allowed:
                    deepened += 1
                    if upper - lower < -_NEAR * upper or deepened > _DEEPEN:
                        status[at] = OPEN
                        break
                for _ in range(_AT_ONCE):
                    best = 0
                    for k in range(1, n):
                        if d[k] < d[best]:
                            best = k
                    if not d[best] < 0.0:
                        break
                    d[best] = np.inf
                    back_transform(h, n, e, tau, z[best], x)
                    _rank_one(x, n, gain, outer, cut)
                    _append_cut(cuts_t, n_cuts, values, values_t, columns_t, n_columns, cut)
                    asked[n_cuts] = 0.0
                    for p in range(width):
                        asked[n_cuts] += cut[p] * target[p]
                    n_cuts += 1
            if status[at] >= OPEN:
                which[n_open], excess[n_open] = at, -upper
                n_open += 1
            elif n_open < which.shape[0]:
                for p in range(width):
                    witness[n_open, p] = 0.0
    return (
        status,
        which[:n_open].copy(),
        witness[:n_open].copy(),
        excess[:n_open].copy(),
        cuts_t[:, n_first:n_cuts].T.copy(),
    )


@njit(cache=True, nogil=True, error_model="numpy")
def _forget(cuts_t, values, values_t, n_first, n_cuts, n_columns):
    """Keep the first cuts and the newer half of the others."""
    start = n_first + (n_cuts - n_first) // 2
    for i in range(start, n_cuts):
        to = n_first + i - start
        for p in range(cuts_t.shape[0]):
            cuts_t[p, to] = cuts_t[p, i]
        for j in range(n_columns):
            values[to, j] = values[i, j]
            values_t[j, to] = values_t[j, i]
    return n_first + n_cuts - start


@njit(cache=True, nogil=True, error_model="numpy")
def leading_functionals(packed, rows, n, gain, out):
    """Functionals x xᴴ (len(rows), n²) of the leading unit eigenvectors x of packed[rows]."""
    h, outer = np.empty((n, n), dtype=np.complex128), np.empty((n, n), dtype=np.complex128)
    d, f, tau, z = np.empty(n), np.empty(n), np.empty(n), np.empty((n, n))
    e, x, row = np.empty(n, dtype=np.complex128), np.empty(n, dtype=np.complex128), np.empty(n * n)
    for k in range(rows.shape[0]):
        for p in range(n * n):
            row[p] = packed[rows[k], p]
        unpacked(row, n, h)
        eigensystem(h, n, d, e, f, tau, z)
        best = 0
        for i in range(1, n):
            if d[i] > d[best]:
                best = i
        back_transform(h, n, e, tau, z[best], x)
        _rank_one(x, n, gain, outer, out[k])
