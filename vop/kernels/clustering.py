"""Kernels of clustering: which matrices are near a core, and how far a cluster grows.

Everything is nogil, single-threaded and in a fixed order; callers spread whole cores over threads.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from vop.hermitian import pack_row, unpack_row
from vop.kernels.cholesky import is_positive
from vop.kernels.eigen import add_positive_part, back_transform, eigensystem
from vop.kernels.lanes import (
    LANES,
    lane_buffer_size,
    lanes_at_most,
    least_eigenvalues,
    positive_lanes,
    subtract_rows,
)

#: What a member of a list of candidates is to its cluster.
OUTSIDE, FREE, GREW, REFUSED = 0, 1, 2, 3

_ALL = (1 << LANES) - 1


@njit(cache=True, nogil=True, error_model="numpy")
def largest_eigenvalues(packed, n, positions, first, last, out):
    """λmax of rows first … last − 1 of ``packed`` (N, n²) float32 into ``out`` (N,) float64."""
    lanes, zeros = np.zeros(lane_buffer_size(n)), np.zeros(n * n)
    least = np.empty(LANES)
    index = np.empty(LANES, dtype=np.int64)
    for start in range(first, last, LANES):
        count = min(LANES, last - start)
        for lane in range(LANES):
            index[lane] = start + min(lane, count - 1)
        subtract_rows(lanes, positions, zeros, packed, index)
        least_eigenvalues(lanes, n, least)
        for lane in range(count):
            out[start + lane] = -least[lane]


@njit(cache=True, nogil=True, error_model="numpy")
def halve(table, order, first, last, block):
    """Reorder order[first … last − 1] so that one half is below the median of the widest column.

    table : (N, M) float32, whose rows ``order`` (N,) int64 names. Returns the place of the second half,
    a multiple of ``block`` after ``first``.
    """
    count = last - first
    step = max(1, count // 24)
    best, column = -1.0, 0
    for m in range(table.shape[1]):
        low, high = np.inf, -np.inf
        for q in range(first, last, step):
            value = table[order[q], m]
            low, high = min(low, value), max(high, value)
        if high - low > best:
            best, column = high - low, m
    middle = first + (((count + block - 1) // block + 1) // 2) * block
    _select(table, order, column, first, last - 1, middle)
    return middle


@njit(cache=True, nogil=True, error_model="numpy")
def order_by_halving(table, order, first, last, block):
    """Halve order[first … last − 1] until segments hold at most ``block`` rows: like rows together."""
    stack = [(first, last)]
    while len(stack) > 0:
        low, high = stack.pop()
        if high - low > block:
            middle = halve(table, order, low, high, block)
            stack.append((low, middle))
            stack.append((middle, high))


@njit(cache=True, nogil=True, error_model="numpy")
def _select(table, order, column, low, high, k):
    """Hoare's selection: order[low … high] so that place k holds what a sort by the column would."""
    while low < high:
        pivot = table[order[(low + high) // 2], column]
        i, j = low, high
        while i <= j:
            while table[order[i], column] < pivot:
                i += 1
            while pivot < table[order[j], column]:
                j -= 1
            if i <= j:
                order[i], order[j] = order[j], order[i]
                i += 1
                j -= 1
        if k <= j:
            high = j
        elif k >= i:
            low = i
        else:
            return


@njit(cache=True, nogil=True, error_model="numpy")
def into_blocks(table, order, first, last, out):
    """Rows order[first … last − 1] of ``table`` (R, M) float32 as blocks.

    Row order[q] goes to out[q // LANES, m·LANES + q % LANES]; the last block is filled up with +inf.
    """
    width = table.shape[1]
    for q in range(first, -(-last // LANES) * LANES):
        b, lane = q // LANES, q % LANES
        for m in range(width):
            out[b, m * LANES + lane] = table[order[q], m] if q < last else np.inf


@njit(cache=True, nogil=True, error_model="numpy")
def compact_blocks(blocks, rows, alive):
    """Drop dead rows of ``blocks`` (B, M·LANES) and ``rows`` (B·LANES,) in place; returns how many stay."""
    width = blocks.shape[1] // LANES
    kept = 0
    for q in range(rows.shape[0]):
        if rows[q] < 0 or not alive[rows[q]]:
            continue
        for m in range(width):
            blocks[kept // LANES, m * LANES + kept % LANES] = blocks[q // LANES, m * LANES + q % LANES]
        rows[kept] = rows[q]
        kept += 1
    for q in range(kept, -(-kept // LANES) * LANES):
        for m in range(width):
            blocks[q // LANES, m * LANES + q % LANES] = np.inf
        rows[q] = -1
    return kept


@njit(cache=True, nogil=True, error_model="numpy")
def minima_of_blocks(blocks, out):
    """Least number of each block and column of ``blocks`` (B, M·LANES), again as blocks of LANES."""
    n_blocks, width = blocks.shape
    for b in range(out.shape[0] * LANES):
        for m in range(width // LANES):
            least = np.float32(np.inf)
            if b < n_blocks:
                for lane in range(LANES):
                    least = min(least, blocks[b, m * LANES + lane])
            out[b // LANES, m * LANES + b % LANES] = least


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _lanes_below(block, turn, depth, limits):
    mask = _ALL
    for place in range(depth):
        m = turn[place]
        mask &= lanes_at_most(block, m * LANES, limits[m])
        if mask == 0:
            break
    return mask


@njit(cache=True, nogil=True, error_model="numpy")
def candidates_of(
    cores, packed, n, bound, positions, one, functionals, usual, margin, blocks, upper, rows, alive
):
    """Rows Q with λmin(B − Q) ≥ −bound, for each core B, by descending λmin.

    Two screens come first, and neither rejects a row that belongs: values wᴴQw for a pool of
    excitations w, of blocks of rows and then of rows, and an elimination in float32. What passes is
    decided in float64.

    Parameters
    ----------
    cores : (P,) int64 rows. packed : (N, n²) float32.
    positions : :func:`~vop.kernels.lanes.lane_positions`. one : (n²,) float64, the packed identity.
    functionals : (M, n²) float32, packed w wᴴ of the pool. usual : (M,) usual values of them.
    margin : more than what float32 can lose in a pool value.
    blocks, upper : pool values as blocks of rows, and minima over blocks (:func:`into_blocks`).
    rows : (B·LANES,) int64, row of each place, −1 for padding. alive : (N,) bool.

    Returns
    -------
    offsets (P + 1,) int64, found (C,) int64, keys (C,) float64: λmin(B − Q).
    """
    single = np.zeros(lane_buffer_size(n), dtype=np.float32)
    double = np.zeros(lane_buffer_size(n))
    first_wait, second_wait = np.empty(LANES, dtype=np.int64), np.empty(2 * LANES, dtype=np.int64)
    least, core = np.empty(LANES), np.empty(n * n)
    raised = np.empty(n * n, dtype=np.float32)
    width = usual.shape[0]
    # Rows of a block that is near as a whole mostly pass; the elimination of small ones costs no more.
    depth = min(width, max(4, n * n // 8))
    limits = np.empty(width, dtype=np.float32)
    turn = np.empty(width, dtype=np.int64)
    offsets = np.zeros(cores.shape[0] + 1, dtype=np.int64)
    found, keys = np.empty(1024, dtype=np.int64), np.empty(1024)
    total = 0
    for c in range(cores.shape[0]):
        for p in range(n * n):
            core[p] = packed[cores[c], p]
        # (4n + 16)·2⁻²⁴ of the trace is more than float32 can lose in eliminating a positive matrix.
        shift = 0.0
        for p in range(n * n):
            shift += one[p] * (core[p] + bound)
        shift *= (4 * n + 16) * 2.0**-24
        for p in range(n * n):
            raised[p] = core[p] + (bound + shift) * one[p]
        for m in range(width):
            value = bound + margin
            for p in range(n * n):
                value += functionals[m, p] * core[p]
            limits[m] = value
        for m in range(width):
            at = m
            while at > 0 and limits[turn[at - 1]] * usual[m] > limits[m] * usual[turn[at - 1]]:
                turn[at] = turn[at - 1]
                at -= 1
            turn[at] = m
        begin = total
        n_first, n_second = 0, 0
        for u in range(upper.shape[0] + 1):
            at_end = u == upper.shape[0]
            mask = 0 if at_end else _lanes_below(upper[u], turn, width, limits)
            for q in range(LANES):
                inner = 0
                b = u * LANES + q
                if (mask >> q) & 1:
                    inner = _lanes_below(blocks[b], turn, depth, limits)
                elif not (at_end and q == 0):
                    continue
                for lane in range(LANES):
                    if (inner >> lane) & 1:
                        r = rows[b * LANES + lane]
                        if r >= 0 and alive[r]:
                            first_wait[n_first] = r
                            n_first += 1
                    elif not (at_end and lane == 0):
                        continue
                    if n_first == LANES or (at_end and n_first > 0):
                        n_second = _eliminated(
                            first_wait, n_first, raised, packed, n, positions, single, second_wait, n_second
                        )
                        n_first = 0
                    while n_second >= LANES or (at_end and n_second > 0):
                        count = min(n_second, LANES)
                        if total + LANES > found.shape[0]:
                            found, keys = _longer(found, total), _longer(keys, total)
                        for k in range(count, LANES):
                            second_wait[k] = second_wait[0]
                        subtract_rows(double, positions, core, packed, second_wait)
                        least_eigenvalues(double, n, least)
                        for k in range(count):
                            if least[k] >= -bound:
                                found[total], keys[total] = second_wait[k], least[k]
                                total += 1
                        for k in range(count, n_second):
                            second_wait[k - count] = second_wait[k]
                        n_second -= count
        _sort(found, keys, begin, total)
        offsets[c + 1] = total
    return offsets, found[:total].copy(), keys[:total].copy()


@njit(cache=True, nogil=True, error_model="numpy")
def _longer(values, count):
    longer = np.empty(2 * values.shape[0], dtype=values.dtype)
    for k in range(count):
        longer[k] = values[k]
    return longer


@njit(cache=True, nogil=True, error_model="numpy")
def _eliminated(waiting, count, raised, packed, n, positions, lanes, passed, n_passed):
    """Append those of ``waiting`` to ``passed`` whose raised − Q is positive in float32."""
    for lane in range(count, LANES):
        waiting[lane] = waiting[0]
    subtract_rows(lanes, positions, raised, packed, waiting)
    mask = positive_lanes(lanes, n)
    for lane in range(count):
        if (mask >> lane) & 1:
            passed[n_passed] = waiting[lane]
            n_passed += 1
    return n_passed


@njit(cache=True, nogil=True, error_model="numpy")
def _before(found, keys, a, b):
    return keys[a] > keys[b] or (keys[a] == keys[b] and found[a] < found[b])


@njit(cache=True, nogil=True, error_model="numpy")
def _sort(found, keys, first, last):
    """Heapsort of found[first:last] by descending key, ties by ascending row."""
    count = last - first
    for start in range(count // 2 - 1, -1, -1):
        _sink(found, keys, first, start, count)
    for end in range(count - 1, 0, -1):
        a, b = first, first + end
        found[a], found[b] = found[b], found[a]
        keys[a], keys[b] = keys[b], keys[a]
        _sink(found, keys, first, 0, end)


@njit(cache=True, nogil=True, error_model="numpy")
def _sink(found, keys, first, place, count):
    while 2 * place + 1 < count:
        child = 2 * place + 1
        if child + 1 < count and _before(found, keys, first + child, first + child + 1):
            child += 1
        a, b = first + place, first + child
        if not _before(found, keys, a, b):
            return
        found[a], found[b] = found[b], found[a]
        keys[a], keys[b] = keys[b], keys[a]
        place = child


@njit(cache=True, nogil=True, error_model="numpy")
def grow(
    cores, offsets, found, keys, marks, known, dirty, growth, chosen, packed, n, bound, tolerance, patience
):
    """Grow clusters: Z = 0; for each candidate, Z + (Q − B − Z)₊ if λmax of that is at most bound.

    Parameters
    ----------
    cores, offsets, found, keys : of :func:`candidates_of`. chosen : indices of the cores to do.
    tolerance : Q ⪯ B + Z + tolerance counts as dominated, λmax(Z) ≤ bound + tolerance as accepted; of
        the positive part, eigenvalues below half of it are left out.
    patience : so many refusals without growth between them end the cluster.
    marks : (C,) int8, written: OUTSIDE, FREE (dominated already), GREW, REFUSED.
    known : (P,) int64, so many marks at the beginning of each cluster stand already; written.
    dirty : (P,) bool, written False.
    growth : (P, n²) float64, written: Z packed.
    """
    width = n * n
    z, more = np.empty((n, n), dtype=np.complex128), np.empty((n, n), dtype=np.complex128)
    h, excess = np.empty((n, n), dtype=np.complex128), np.empty((n, n), dtype=np.complex128)
    real, vectors = np.empty((7, n)), np.empty((n, n))
    e, v = np.empty(n, dtype=np.complex128), np.empty(n, dtype=np.complex128)
    row = np.empty(width)
    for c in chosen:
        core = packed[cores[c]]
        for i in range(n):
            for k in range(i, n):
                z[i, k] = 0.0
        refusals = 0
        for t in range(offsets[c], offsets[c + 1]):
            stands = t < offsets[c] + known[c]
            if refusals >= patience:
                marks[t] = OUTSIDE
            elif not stands and keys[t] >= 0.0:
                marks[t] = FREE
            elif not stands or marks[t] == GREW:
                q = packed[found[t]]
                for p in range(width):
                    row[p] = np.float64(q[p]) - np.float64(core[p])
                unpack_row(row, n, excess)
                if not stands and _dominates(z, excess, tolerance, n, h):
                    marks[t] = FREE
                else:
                    for i in range(n):
                        for k in range(i, n):
                            h[k, i] = (excess[i, k] - z[i, k]).conjugate()
                            more[i, k] = z[i, k]
                    good = add_positive_part(h, n, 0.5 * tolerance, more, real, vectors, e, v)
                    # What the eigenvectors should have made true is checked, not trusted.
                    good = good and _at_most(more, bound + tolerance, n, h)
                    good = good and _dominates(more, excess, tolerance, n, h)
                    marks[t] = GREW if good else REFUSED
                    if good:
                        z, more = more, z
            if marks[t] == REFUSED:
                refusals += 1
            elif marks[t] == GREW:
                refusals = 0
        known[c] = offsets[c + 1] - offsets[c]
        dirty[c] = False
        pack_row(z, n, growth[c])


@njit(cache=True, nogil=True, error_model="numpy")
def _dominates(z, excess, tolerance, n, h):
    """Whether z + tolerance·1 ⪰ excess; upper triangles, h scratch."""
    for i in range(n):
        for k in range(i, n):
            h[i, k] = z[i, k] - excess[i, k]
        h[i, i] += tolerance
    return is_positive(h, n)


@njit(cache=True, nogil=True, error_model="numpy")
def _at_most(z, bound, n, h):
    """Whether λmax(z) ≤ bound for z ⪰ 0; upper triangle, h scratch."""
    trace = 0.0
    for i in range(n):
        trace += z[i, i].real
    if trace <= bound:
        return True
    for i in range(n):
        for k in range(i, n):
            h[i, k] = -z[i, k]
        h[i, i] += bound
    return is_positive(h, n)


@njit(cache=True, nogil=True, error_model="numpy")
def eigenvectors(packed, n, first, last, values, vectors):
    """Of rows first … last − 1 of ``packed`` (R, n²) float64: values (R, n), vectors in rows of (R, n, n)."""
    h = np.empty((n, n), dtype=np.complex128)
    e = np.empty(n, dtype=np.complex128)
    f, tau, z = np.empty(n), np.empty(n), np.empty((n, n))
    for r in range(first, last):
        unpack_row(packed[r], n, h)
        eigensystem(h, n, values[r], e, f, tau, z)
        for k in range(n):
            back_transform(h, n, e, tau, z[k], vectors[r, k])


@njit(cache=True, nogil=True, error_model="numpy")
def greedy_cover(told, count):
    """Up to ``count`` columns of ``told`` (P, O) bool, each telling most rows that none before told."""
    n_rows, width = told.shape
    gain = np.zeros(width, dtype=np.int64)
    for r in range(n_rows):
        for o in range(width):
            gain[o] += told[r, o]
    left = np.ones(n_rows, dtype=np.bool_)
    chosen = np.empty(count, dtype=np.int64)
    for k in range(count):
        best = np.argmax(gain)
        if gain[best] == 0:
            return chosen[:k].copy()
        chosen[k] = best
        for r in range(n_rows):
            if left[r] and told[r, best]:
                left[r] = False
                for o in range(width):
                    gain[o] -= told[r, o]
    return chosen


@njit(cache=True, nogil=True, error_model="numpy")
def next_alive(order, at, alive, count):
    """The next ``count`` living rows of ``order`` from place ``at`` on, and the place after them."""
    out = np.empty(max(count, 0), dtype=np.int64)
    n_out = 0
    while n_out < count and at < order.shape[0]:
        if alive[order[at]]:
            out[n_out] = order[at]
            n_out += 1
        at += 1
    return out[:n_out].copy(), at


@njit(cache=True, nogil=True, error_model="numpy")
def commit(cores, offsets, found, marks, known, dirty, alive):
    """Close clusters in order, as far as those before leave them as they were grown.

    alive : (N,) bool, written: members die. dirty : (P,) bool, set where an earlier cluster took a
    candidate that counted; known : (P,) int64, written: marks that stand nevertheless.
    Returns (first, closed): the first core that is not settled, and whether each core was closed.
    """
    n_cores = cores.shape[0]
    closed = np.zeros(n_cores, dtype=np.bool_)
    first = n_cores
    for c in range(n_cores):
        if not alive[cores[c]]:
            continue
        for t in range(offsets[c], offsets[c] + known[c]):
            if not alive[found[t]] and (marks[t] == GREW or marks[t] == REFUSED):
                known[c] = t - offsets[c]
                dirty[c] = True
                break
        if dirty[c]:
            first = min(first, c)
        if first < n_cores:
            continue
        alive[cores[c]] = False
        for t in range(offsets[c], offsets[c + 1]):
            if marks[t] == FREE or marks[t] == GREW:
                alive[found[t]] = False
        closed[c] = True
    return first, closed


@njit(cache=True, nogil=True, error_model="numpy")
def still_open(first, cores, offsets, found, keys, marks, known, dirty, growth, alive):
    """The clusters from ``first`` on whose core is alive, with the candidates that are."""
    n_cores, total = 0, 0
    for c in range(first, cores.shape[0]):
        if alive[cores[c]]:
            n_cores += 1
            for t in range(offsets[c], offsets[c + 1]):
                total += alive[found[t]]
    cores_left, known_left = np.empty(n_cores, dtype=np.int64), np.zeros(n_cores, dtype=np.int64)
    offsets_left, dirty_left = np.zeros(n_cores + 1, dtype=np.int64), np.empty(n_cores, dtype=np.bool_)
    found_left, keys_left = np.empty(total, dtype=np.int64), np.empty(total)
    marks_left, growth_left = np.empty(total, dtype=np.int8), np.empty((n_cores, growth.shape[1]))
    n_cores, total = 0, 0
    for c in range(first, cores.shape[0]):
        if not alive[cores[c]]:
            continue
        for t in range(offsets[c], offsets[c + 1]):
            if alive[found[t]]:
                found_left[total], keys_left[total], marks_left[total] = found[t], keys[t], marks[t]
                known_left[n_cores] += t < offsets[c] + known[c]
                total += 1
        cores_left[n_cores], dirty_left[n_cores] = cores[c], dirty[c]
        for p in range(growth.shape[1]):
            growth_left[n_cores, p] = growth[c, p]
        n_cores += 1
        offsets_left[n_cores] = total
    return cores_left, offsets_left, found_left, keys_left, marks_left, known_left, dirty_left, growth_left
