"""Search for the weights of a proof. Nothing here is trusted: whatever it proposes is proved after.

Each target T wants weights c ≥ 0, Σ c = 1 with Σ c_k C_k − T ⪰ 0 over the columns C. In order of cost:
combinations that served the targets before it; single columns, filtered by witnesses (any X ⪰ 0 with
tr(C_k X) < tr(T X) excludes column k); a small convex problem over few columns, which grows by the
columns that its dual solution asks for (:mod:`vop.kernels.proof_convex`).
"""

from __future__ import annotations

import numpy as np
from numba import njit

from vop.hermitian import pack_row
from vop.kernels.proof_convex import FOUND, convex_weights
from vop.kernels.proof_psd import cholesky, combine, expand, largest_entry, positive_trace, shift_bound

#: Combinations remembered from earlier targets, most recently used first.
_POOL = 48
#: Witnesses remembered, from earlier targets too; half of them at the start of each target.
_WITNESSES = 48
#: Probes that all columns are held against, the most telling ones of each target.
_SIEVE = 12


@njit(cache=True, nogil=True, error_model="numpy")
def functional(x, n, gain, square, out):
    """Packed functional of the excitation x (n,): row @ out = xᴴ A x."""
    for i in range(n):
        for j in range(n):
            square[i, j] = x[i] * x[j].conjugate()
    pack_row(square, n, out)
    for p in range(n * n):
        out[p] *= gain[p]


@njit(cache=True, nogil=True, error_model="numpy")
def _dot(row, f):
    total = 0.0
    for p in range(f.shape[0]):
        total += np.float64(row[p]) * f[p]
    return total


@njit(cache=True, nogil=True, error_model="numpy")
def failing_direction(factor, n, at, x):
    """The unit vector along which H − shift·1 is not positive, from a factorisation that stopped."""
    for i in range(n):
        x[i] = 0.0
    x[at] = 1.0
    for i in range(at - 1, -1, -1):
        value = -factor[at, i].conjugate()
        for k in range(i + 1, at):
            value -= factor[k, i].conjugate() * x[k]
        x[i] = value / factor[i, i].real
    norm = 0.0
    for i in range(at + 1):
        norm += x[i].real ** 2 + x[i].imag ** 2
    for i in range(at + 1):
        x[i] /= np.sqrt(norm)


@njit(cache=True, nogil=True, error_model="numpy")
def _covers(packed, entries, n, terms, h, factor):
    """n where the combination is proved, else the failing column."""
    expand(packed, n, h)
    # Twice the bound: the sums here are not in the order of the proof, whose shift must pass too.
    return cholesky(h, n, 2.0 * shift_bound(positive_trace(h, n), entries, n, terms), factor)


@njit(cache=True, nogil=True, error_model="numpy")
def _to_front(order, at):
    chosen = order[at]
    for i in range(at, 0, -1):
        order[i] = order[i - 1]
    order[0] = chosen


@njit(cache=True, nogil=True, error_model="numpy")
def search(
    targets, extra, columns, columns_t, probes, probe_values, probe_mean, probe_spread, scale, n, gain
):
    """Propose weights for each target.

    Parameters
    ----------
    targets : (R, n²) float32. extra : (n²,) float64 added to every combination.
    columns : (K, n²) float32; columns_t : (n², K) float64, its transpose.
    probes : (P, n²) float64 functionals; probe_values : (P, K), theirs on ``columns``, of mean
        probe_mean (P,) and spread probe_spread (P,).
    scale : worst-case eigenvalue, sets what counts as converged.
    gain : (n²,) inner weights of the packing.

    Returns
    -------
    starts, index, weight : terms of each target as in :func:`vop.kernels.proof_psd.certify`.
    bound : (R,) float64, for open targets an upper bound of the least eigenvalue that any weights
        reach (float arithmetic), for others ∞.
    witness : (R, n²) packed covariance of unit trace that attains it, zero where covered.
    """
    n_targets, width = targets.shape
    n_columns = columns.shape[0]
    starts = np.zeros(n_targets + 1, dtype=np.int64)
    index = np.empty(4 * n_targets + 64, dtype=np.int64)
    weight = np.empty(4 * n_targets + 64)
    bound = np.full(n_targets, np.inf)
    witness = np.zeros((n_targets, width))

    h = np.empty((n, n), dtype=np.complex128)
    factor = np.zeros((n, n), dtype=np.complex128)
    packed = np.empty(width)
    target = np.empty(width)
    witnesses, known, wanted = np.empty((_WITNESSES, width)), 0, np.empty(_WITNESSES)
    asked, telling = np.empty(probes.shape[0]), np.zeros(probes.shape[0], dtype=np.int64)
    margins = np.empty(n_columns)

    limit = min(n_columns, max(48, 8 * n))
    pool_sum = np.zeros((_POOL, width))
    pool_terms = np.zeros(_POOL, dtype=np.int64)
    pool_index = np.zeros((_POOL, limit), dtype=np.int64)
    pool_weight = np.zeros((_POOL, limit))
    pool_entries = np.zeros(_POOL)
    order = np.arange(_POOL)
    chosen, c, m = np.zeros(limit, dtype=np.int64), np.zeros(limit), 0
    filled = 0
    extra_entries = largest_entry(extra)

    for r in range(n_targets):
        first = starts[r]
        starts[r + 1] = first
        target_entries = largest_entry(targets[r])
        if not target_entries < np.inf:
            # NaN or infinity: stays open, and no bound says anything about it.
            bound[r] = np.nan
            continue
        for p in range(width):
            target[p] = np.float64(targets[r, p]) - extra[p]

        covered = False
        for slot in range(filled):
            s = order[slot]
            for p in range(width):
                packed[p] = pool_sum[s, p] - target[p]
            entries = pool_entries[s] + target_entries + extra_entries
            if _covers(packed, entries, n, pool_terms[s] + 1.0, h, factor) == n:
                covered = True
                _to_front(order, slot)
                break

        if not covered:
            _most_telling(target, probes, probe_mean, probe_spread, asked, telling)
            sieve = min(_SIEVE, probes.shape[0])
            _probe(probe_values, telling, sieve, asked, margins)
            best, known = _single(
                targets[r],
                target,
                extra,
                columns,
                margins,
                asked,
                telling,
                probe_values,
                wanted,
                witnesses,
                known,
                n,
                gain,
                packed,
                h,
                factor,
            )
            if best >= 0:
                covered = True
                chosen[0], c[0], m = best, 1.0, 1
            else:
                _probe(probe_values, telling, probes.shape[0], asked, margins)
                status, m, chosen, c, bound[r] = convex_weights(
                    columns, columns_t, target, margins, scale, n, gain, limit, witness[r]
                )
                if status == FOUND:
                    entries = combine(targets[r], extra, columns, chosen[:m], c[:m], n, packed)
                    if _covers(packed, entries, n, m + 1.0, h, factor) == n:
                        covered = True
            if covered:
                _to_front(order, _POOL - 1)
                s = order[0]
                pool_terms[s] = m
                pool_entries[s] = _remember(columns, chosen, c, m, pool_index[s], pool_weight[s], pool_sum[s])
                filled = min(filled + 1, _POOL)

        if covered:
            bound[r] = np.inf
            for p in range(width):
                witness[r, p] = 0.0
            s = order[0]
            starts[r + 1] = first + pool_terms[s]
            if starts[r + 1] > index.shape[0]:
                index = _grown(index, first, 2 * starts[r + 1])
                weight = _grown(weight, first, 2 * starts[r + 1])
            for t in range(pool_terms[s]):
                index[first + t] = pool_index[s, t]
                weight[first + t] = pool_weight[s, t]
    total = starts[n_targets]
    return starts, index[:total], weight[:total], bound, witness


@njit(cache=True, nogil=True, error_model="numpy")
def _probe(probe_values, order, count, wanted, margins):
    """margins[k] = the least of tr(C_k X) − tr(T X) over the first ``count`` probes X in ``order``."""
    for k in range(margins.shape[0]):
        margins[k] = np.inf
    for place in range(count):
        q = order[place]
        asked = wanted[q]
        row = probe_values[q]
        for k in range(margins.shape[0]):
            # Not min(): its care for NaN keeps the loop from being vectorised.
            margin = row[k] - asked
            margins[k] = margin if margin < margins[k] else margins[k]


@njit(cache=True, nogil=True, error_model="numpy")
def _most_telling(target, probes, probe_mean, probe_spread, wanted, order):
    """wanted[q] = tr(T X_q); order: probes along which the target asks for most, by columns' standards."""
    score = np.empty(order.shape[0])
    for q in range(order.shape[0]):
        wanted[q] = _dot(target, probes[q])
        score[q] = (wanted[q] - probe_mean[q]) / probe_spread[q]
        place = q
        while place > 0 and score[order[place - 1]] < score[q]:
            order[place] = order[place - 1]
            place -= 1
        order[place] = q


@njit(cache=True, nogil=True, error_model="numpy")
def _single(
    row,
    target,
    extra,
    columns,
    margins,
    asked,
    order,
    probe_values,
    wanted,
    witnesses,
    known,
    n,
    gain,
    packed,
    h,
    factor,
):
    """A column that covers the target by itself, or −1; and how many witnesses are known after.

    ``margins`` holds what the first _SIEVE probes leave. Columns are tried in descending order of
    their margins; the other probes and the witnesses are applied only to a column that is about to
    be tried. What stops the factorisation of a column is a new witness, against the others and,
    likely, for the targets to come.
    """
    x = np.empty(n, dtype=np.complex128)
    square = np.empty((n, n), dtype=np.complex128)
    alive = np.empty(margins.shape[0], dtype=np.int64)
    n_probes = order.shape[0]
    applied = np.full(margins.shape[0], min(_SIEVE, n_probes), dtype=np.int64)
    count = 0
    for k in range(margins.shape[0]):
        if margins[k] >= 0.0:
            alive[count] = k
            count += 1
    pick, one = np.zeros(1, dtype=np.int64), np.ones(1)
    extra_is_zero = largest_entry(extra) == 0.0
    half = witnesses.shape[0] // 2
    if known > half:
        for q in range(half):
            for p in range(witnesses.shape[1]):
                witnesses[q, p] = witnesses[known - half + q, p]
        known = half
    for q in range(known):
        wanted[q] = _dot(target, witnesses[q])
    while count > 0:
        place = 0
        for a in range(count):
            if margins[alive[a]] > margins[alive[place]]:
                place = a
        best = alive[place]
        before = margins[best]
        while applied[best] < n_probes + known and margins[best] >= 0.0:
            if applied[best] < n_probes:
                q = order[applied[best]]
                margin = probe_values[q, best] - asked[q]
            else:
                q = applied[best] - n_probes
                margin = _dot(columns[best], witnesses[q]) - wanted[q]
            margins[best] = min(margins[best], margin)
            applied[best] += 1
        if margins[best] < before:
            if margins[best] < 0.0:
                count -= 1
                alive[place] = alive[count]
            continue
        pick[0] = best
        entries = combine(row, extra, columns, pick, one, n, packed)
        at = _covers(packed, entries, n, 2.0, h, factor)
        if at == n or (extra_is_zero and largest_entry(packed) == 0.0):
            return best, known
        count -= 1
        alive[place] = alive[count]
        if known < witnesses.shape[0]:
            failing_direction(factor, n, at, x)
            functional(x, n, gain, square, witnesses[known])
            wanted[known] = _dot(target, witnesses[known])
            known += 1
    return -1, known


@njit(cache=True, nogil=True, error_model="numpy")
def _grown(values, used, size):
    out = np.empty(size, dtype=values.dtype)
    for i in range(used):
        out[i] = values[i]
    return out


@njit(cache=True, nogil=True, error_model="numpy")
def _remember(columns, chosen, c, m, index, weight, mixture):
    """Write a combination into a slot of the pool; returns its ``entries``."""
    entries = 0.0
    for p in range(mixture.shape[0]):
        mixture[p] = 0.0
    for t in range(m):
        index[t] = chosen[t]
        weight[t] = c[t]
        column = columns[chosen[t]]
        entries += c[t] * largest_entry(column)
        for p in range(mixture.shape[0]):
            mixture[p] += c[t] * np.float64(column[p])
    return entries


@njit(cache=True, nogil=True, error_model="numpy")
def leading_excitations(rows, n, steps, out):
    """out[r] (n,) ≈ unit eigenvector of the largest eigenvalue of rows[r], by ``steps`` power steps."""
    h = np.empty((n, n), dtype=np.complex128)
    y = np.empty(n, dtype=np.complex128)
    for r in range(rows.shape[0]):
        expand(rows[r], n, h)
        largest = 0
        for i in range(n):
            if h[i, i].real > h[largest, largest].real:
                largest = i
        x = out[r]
        for i in range(n):
            x[i] = h[i, largest]
        for _ in range(steps):
            norm = 0.0
            for i in range(n):
                norm += x[i].real ** 2 + x[i].imag ** 2
            if not norm > 0.0:
                x[:] = 0.0
                x[largest] = 1.0
                break
            norm = 1.0 / np.sqrt(norm)
            for i in range(n):
                x[i] *= norm
            for i in range(n):
                total = 0.0j
                for j in range(n):
                    total += h[i, j] * x[j]
                y[i] = total
            for i in range(n):
                x[i] = y[i]


@njit(cache=True, nogil=True, error_model="numpy")
def functionals(x, n, gain, out):
    """Packed functionals (P, n²) of excitations (P, n), scaled to unit length; zero stays zero."""
    square = np.empty((n, n), dtype=np.complex128)
    for r in range(x.shape[0]):
        norm = 0.0
        for i in range(n):
            norm += x[r, i].real ** 2 + x[r, i].imag ** 2
        functional(x[r], n, gain, square, out[r])
        if norm > 0.0:
            for p in range(n * n):
                out[r, p] /= norm


@njit(cache=True, nogil=True, error_model="numpy")
def values_on(rows, f, out):
    """out[r] = rows[r] @ f for (R, n²) float32 rows; fixed order."""
    for r in range(rows.shape[0]):
        out[r] = _dot(rows[r], f)
