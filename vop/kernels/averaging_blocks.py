"""Averages of matrix entries over the boxes of a tile, eight entries abreast, in one sweep along z.

Summed volumes (:mod:`vop.kernels.averaging`) are made plane by plane and kept in a window just tall enough
for the tallest box; a box is read as soon as the plane of its upper end is there. A *block* is eight
entries that few channels share, so that each number is fetched once for many products. It belongs to two
pairs of channels, (a, b) and (c, d), and holds, (i, j) being conj(E_i)·E_j,

* pattern 0: real and imaginary part of (a, c), (a, d), (b, c), (b, d);
* pattern 1: (a, a), (b, b), real and imaginary part of (a, b), and the same of c and d.

Samples of E lie as :func:`pack_channel` puts them: flat, the numbers of a pair of channels for one
stretch of cells of a row next to each other.
"""

from __future__ import annotations

import numpy as np
from numba import njit, prange

from vop.kernels.averaging_vectors import LANES, STRETCH, add_plane, sum_stretch

#: Numbers of a pair of channels in a stretch: Re and Im of the first, Re and Im of the second.
PAIR = 4 * STRETCH


@njit(cache=True, nogil=True, parallel=True)
def pack_channel(e, kept, channel, variants, packed, broken):
    """Put the samples of one channel where the sweep wants them.

    e : (3, samples z, y, x) complex64. kept : (samples z, y, x) bool, the others become zero.
    variants : (V, 2) int64, component and offset along x.
    packed : (pairs, samples z, y, stretches, V, PAIR) float32, written.
    broken : (samples z,) bool, set where a kept sample is not finite.
    """
    pair, half = channel // 2, 2 * STRETCH * (channel % 2)
    nx = e.shape[3]
    for k in prange(e.shape[1]):
        fine = True
        for j in range(e.shape[2]):
            keep = kept[k, j]
            for s in range(packed.shape[3]):
                for v in range(variants.shape[0]):
                    first = s * STRETCH + variants[v, 1]
                    line = e[variants[v, 0], k, j]
                    re = packed[pair, k, j, s, v, half : half + STRETCH]
                    im = packed[pair, k, j, s, v, half + STRETCH : half + 2 * STRETCH]
                    count = max(0, min(STRETCH, nx - first))
                    re[count:] = 0.0
                    im[count:] = 0.0
                    for i in range(count):
                        value = line[first + i] if keep[first + i] else np.complex64(0.0)
                        re[i], im[i] = value.real, value.imag
                        # The difference of a number that is not finite and itself is not zero.
                        fine &= (value.real - value.real == 0.0) and (value.imag - value.imag == 0.0)
        broken[k] = not fine


@njit(cache=True, nogil=True)
def _add_cross_products(one, two, weight, out):
    s = STRETCH
    for i in range(s):
        a, ai = weight[i] * one[i], weight[i] * one[s + i]
        b, bi = weight[i] * one[2 * s + i], weight[i] * one[3 * s + i]
        c, ci = np.float64(two[i]), np.float64(two[s + i])
        d, di = np.float64(two[2 * s + i]), np.float64(two[3 * s + i])
        out[i] += a * c + ai * ci
        out[s + i] += a * ci - ai * c
        out[2 * s + i] += a * d + ai * di
        out[3 * s + i] += a * di - ai * d
        out[4 * s + i] += b * c + bi * ci
        out[5 * s + i] += b * ci - bi * c
        out[6 * s + i] += b * d + bi * di
        out[7 * s + i] += b * di - bi * d


@njit(cache=True, nogil=True)
def _add_own_products(one, two, weight, out):
    s = STRETCH
    for i in range(s):
        w = weight[i]
        a, ai = np.float64(one[i]), np.float64(one[s + i])
        b, bi = np.float64(one[2 * s + i]), np.float64(one[3 * s + i])
        c, ci = np.float64(two[i]), np.float64(two[s + i])
        d, di = np.float64(two[2 * s + i]), np.float64(two[3 * s + i])
        out[i] += w * (a * a + ai * ai)
        out[s + i] += w * (b * b + bi * bi)
        out[2 * s + i] += w * (a * b + ai * bi)
        out[3 * s + i] += w * (a * bi - ai * b)
        out[4 * s + i] += w * (c * c + ci * ci)
        out[5 * s + i] += w * (d * d + di * di)
        out[6 * s + i] += w * (c * d + ci * di)
        out[7 * s + i] += w * (c * di - ci * d)


@njit(cache=True, nogil=True)
def _keep(sums, below, here):
    for m in range(sums.size):
        here[m] = below[m] + sums[m]


@njit(cache=True, nogil=True)
def _add_run(run, sums):
    for m in range(0, sums.size, LANES):
        for b in range(LANES):
            sums[m + b] += run[b]


@njit(cache=True, nogil=True)
def _row(e, terms, weight, low, high, pairs, pattern, k, j, products, run, sums, below, here):
    """Add one row of cells to ``sums``, and the plane below to that; flat, lanes innermost."""
    n_stretches = weight.shape[2] // STRETCH
    first, last = low // STRETCH, (high + STRETCH - 1) // STRETCH
    begin, end = LANES * (first * STRETCH + 1), LANES * (min(last * STRETCH, here.size // LANES - 1) + 1)
    _keep(sums[:begin], below[:begin], here[:begin])
    run[:] = 0.0
    left = here.size // LANES - 1 - first * STRETCH
    for s in range(first, last):
        products[:] = 0.0
        for t in range(terms.shape[0]):
            one = e[pairs[0], k + terms[t, 1], j + terms[t, 2], s, terms[t, 0]]
            two = e[pairs[1], k + terms[t, 1], j + terms[t, 2], s, terms[t, 0]]
            w = weight[k, j, s * STRETCH : (s + 1) * STRETCH]
            if pattern == 0:
                _add_cross_products(one, two, w, products)
            else:
                _add_own_products(one, two, w, products)
        sum_stretch(products, min(left, STRETCH), run, sums, below, here, LANES * (s * STRETCH + 1))
        left -= STRETCH
    if last < n_stretches:
        _add_run(run, sums[end:])
    _keep(sums[end:], below[end:], here[end:])


@njit(cache=True, nogil=True)
def _sweep(
    e, terms, weight, span, pairs, pattern, order, ends, nodes, corners, scale, core, window, out, power
):
    """Averages of one block over all boxes, and its power in the core."""
    nz, ny = weight.shape[:2]
    height, plane_size = window.shape
    width = plane_size // (ny + 1)
    flat = window.reshape(-1)
    products, run = np.zeros(LANES * STRETCH), np.zeros(LANES)
    sums = np.empty(width)
    lines, xs = np.empty(4, np.int64), np.empty(4, np.int64)
    window[0] = 0.0
    for k in range(nz + 1):
        here = window[k % height]
        if k > 0:
            below = window[(k - 1) % height]
            here[:width] = 0.0
            sums[:] = 0.0
            for j in range(ny):
                low, high = span[k - 1, j]
                a = (j + 1) * width
                if high > low:
                    _row(
                        e,
                        terms,
                        weight,
                        low,
                        high,
                        pairs,
                        pattern,
                        k - 1,
                        j,
                        products,
                        run,
                        sums,
                        below[a : a + width],
                        here[a : a + width],
                    )
                else:
                    _keep(sums, below[a : a + width], here[a : a + width])
        for z in range(2):
            if k == core[0, z]:
                for y in range(2):
                    for x in range(2):
                        sign = 1.0 if (z + y + x) % 2 == 1 else -1.0
                        n = core[1, y] * width + LANES * core[2, x]
                        for b in range(LANES):
                            power[b] += sign * here[n + b]
        for r in order[ends[k] : ends[k + 1]]:
            run[:] = 0.0
            for m in range(4):
                xs[m] = LANES * nodes[r, 2, m]
            for z in range(4):
                plane = (nodes[r, 0, z] % height) * plane_size
                for m in range(4):
                    lines[m] = plane + nodes[r, 1, m] * width
                add_plane(run, flat, lines, 0, xs, 0, corners[r], 4, corners[r], 8, scale[r] * corners[r, z])
            out[r, :] = run


@njit(cache=True, nogil=True, parallel=True)
def average_blocks(
    e, terms, weight, span, pairs, pattern, order, ends, nodes, corners, scale, core, windows, out, power
):
    """Averages of all blocks over all boxes of a tile.

    e : packed samples, V/m, see :func:`pack_channel`.
    terms : (S, 3) int64, samples of a cell whose products add up: variant, offsets along z and y.
    weight : (nz, ny, stretches · STRETCH) float64, σ/2 times volume over samples per component; zero
        outside span[k, j, 0] ≤ i < span[k, j, 1].
    pairs : (B, 2) int64, pattern : (B,) int64, the blocks.
    order, ends : boxes order[ends[k] : ends[k+1]] have node k of z as their uppermost.
    nodes : (R, 3, 4) int64 and corners : (R, 12) float64, the nodes z, y, x of each box and their signed
        weights. scale : (R,) factors.
    core : (3, 2) int64, nodes z, y, x between which power is summed.
    windows : (T, H, (ny+1)·(nx+1)·LANES) float64, scratch of T workers, whose number changes no bit.
    out : (R, B, LANES), power : (B, LANES) float64 zeros, written.
    """
    workers = windows.shape[0]
    for t in prange(workers):
        for b in range(t, pattern.size, workers):
            _sweep(
                e,
                terms,
                weight,
                span,
                pairs[b],
                pattern[b],
                order,
                ends,
                nodes,
                corners,
                scale,
                core,
                windows[t],
                out[:, b],
                power[b],
            )
