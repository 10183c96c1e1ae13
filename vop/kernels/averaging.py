"""Summed volumes of piecewise constant densities on rectilinear grids, and boxes read from them.

A summed volume T holds, at each corner of the grid, the integral from the first corner to it. For a
density that is constant in each cell T is trilinear within a cell, so that eight signed trilinear
readings give the exact integral over any axis-aligned box, on graded grids too. Arrays are (z, y, x).
"""

from __future__ import annotations

import numpy as np
from numba import njit, prange

#: Matrix entries that are handled side by side: one cache line of float64.
LANES = 8


@njit(cache=True, nogil=True)
def cumulate(table):
    """Integrals of cells at [1:, 1:, 1:] to a summed volume, in place; index 0 planes are zero."""
    nz, ny, nx = table.shape
    for k in range(1, nz):
        for j in range(1, ny):
            run = 0.0
            for i in range(1, nx):
                run += table[k, j, i]
                table[k, j, i] = run + table[k, j - 1, i]
        if k > 1:
            for j in range(1, ny):
                for i in range(1, nx):
                    table[k, j, i] += table[k - 1, j, i]


@njit(cache=True, nogil=True)
def locate(edges, x):
    """Cell index c and fraction f with x = edges[c] + f·(edges[c+1] − edges[c]), clipped to the grid."""
    last = edges.size - 1
    if x <= edges[0]:
        return 0, 0.0
    if x >= edges[last]:
        return last - 1, 1.0
    # Where the cell would be on a uniform axis, then step by step: right at once on most grids.
    c = min(int((x - edges[0]) / (edges[last] - edges[0]) * last), last - 1)
    while edges[c] > x:
        c -= 1
    while edges[c + 1] <= x:
        c += 1
    return c, (x - edges[c]) / (edges[c + 1] - edges[c])


@njit(cache=True, nogil=True)
def corner(table, kz, fz, ky, fy, kx, fx):
    """Trilinear reading of a summed volume."""
    a = table[kz, ky, kx] * (1 - fx) + table[kz, ky, kx + 1] * fx
    b = table[kz, ky + 1, kx] * (1 - fx) + table[kz, ky + 1, kx + 1] * fx
    c = table[kz + 1, ky, kx] * (1 - fx) + table[kz + 1, ky, kx + 1] * fx
    d = table[kz + 1, ky + 1, kx] * (1 - fx) + table[kz + 1, ky + 1, kx + 1] * fx
    return (a * (1 - fy) + b * fy) * (1 - fz) + (c * (1 - fy) + d * fy) * fz


@njit(cache=True, nogil=True)
def box_integral(table, ez, ey, ex, box):
    """Integral over ``box`` (x0, x1, y0, y1, z0, z1), clipped to the grid."""
    x0, u0 = locate(ex, box[0])
    x1, u1 = locate(ex, box[1])
    y0, v0 = locate(ey, box[2])
    y1, v1 = locate(ey, box[3])
    z0, w0 = locate(ez, box[4])
    z1, w1 = locate(ez, box[5])
    high = (
        corner(table, z1, w1, y1, v1, x1, u1)
        - corner(table, z1, w1, y1, v1, x0, u0)
        - corner(table, z1, w1, y0, v0, x1, u1)
        + corner(table, z1, w1, y0, v0, x0, u0)
    )
    low = (
        corner(table, z0, w0, y1, v1, x1, u1)
        - corner(table, z0, w0, y1, v1, x0, u0)
        - corner(table, z0, w0, y0, v0, x1, u1)
        + corner(table, z0, w0, y0, v0, x0, u0)
    )
    return high - low


@njit(cache=True, nogil=True)
def signed_corners(ez, ey, ex, boxes, cell, weight):
    """What :func:`block_integrals` needs of each box: along each axis four nodes with signed weights.

    cell : (R, 3, 2) int64, weight : (R, 3, 4) float64, written; axes z, y, x. The integral is the sum
    over the nodes cell, cell + 1 of the upper end less those of the lower end, in all three axes.
    """
    for r in range(boxes.shape[0]):
        for axis in range(3):
            edges = ez if axis == 0 else (ey if axis == 1 else ex)
            for end in range(2):
                c, f = locate(edges, boxes[r, 2 * (2 - axis) + end])
                sign = 1.0 if end == 1 else -1.0
                cell[r, axis, end] = c
                weight[r, axis, 2 * end] = sign * (1.0 - f)
                weight[r, axis, 2 * end + 1] = sign * f


@njit(cache=True, nogil=True)
def combine_row(row, before, below, corner, here):
    """Summed volumes along one row, from those of the three rows before it; arrays (nx + 1, LANES)."""
    for b in range(LANES):
        here[0, b] = 0.0
    # One running sum per lane; eight names, so that they live in registers.
    a0 = a1 = a2 = a3 = a4 = a5 = a6 = a7 = 0.0
    for i in range(row.shape[1]):
        a0 += row[0, i]
        a1 += row[1, i]
        a2 += row[2, i]
        a3 += row[3, i]
        a4 += row[4, i]
        a5 += row[5, i]
        a6 += row[6, i]
        a7 += row[7, i]
        here[i + 1, 0] = a0
        here[i + 1, 1] = a1
        here[i + 1, 2] = a2
        here[i + 1, 3] = a3
        here[i + 1, 4] = a4
        here[i + 1, 5] = a5
        here[i + 1, 6] = a6
        here[i + 1, 7] = a7
    for i in range(1, here.shape[0]):
        for b in range(LANES):
            here[i, b] += before[i, b] + (below[i, b] - corner[i, b])


@njit(cache=True, nogil=True)
def add_products(line, f, a, b, g, c, d):
    """line += f·a·b + g·c·d, in float64."""
    for i in range(line.size):
        line[i] += f * (np.float64(a[i]) * np.float64(b[i])) + g * (np.float64(c[i]) * np.float64(d[i]))


@njit(cache=True, nogil=True)
def fill_block(re, im, offsets, starts, weight, span, first, second, imaginary, row, table):
    """Summed volumes of the absorbed power of LANES matrix entries, innermost in ``table``.

    re, im : (n, 3, samples z, y, x) float32, E in V/m.
    offsets : (S, 3) int64, starts : (4,) int64; component c of a cell has the samples
        offsets[starts[c] : starts[c+1]] relative to the cell's index; their outer products are averaged.
    weight : (nz, ny, nx) float64, σ/2 times volume, zero outside span[k, j, 0] ≤ i < span[k, j, 1].
    first, second, imaginary : (LANES,) the entries: Re or Im of conj(E_first) E_second.
    row : (LANES, nx) float64 scratch. table : (nz+1, ny+1, nx+1, LANES) float64, written.
    """
    nz, ny = weight.shape[:2]
    table[0] = 0.0
    for k in range(nz):
        table[k + 1, 0] = 0.0
        for j in range(ny):
            low, high = span[k, j]
            row[:] = 0.0
            for b in range(LANES):
                # Slices that begin at 0: indices known to be positive let the compiler use vectors.
                line, heavy = row[b, low:high], weight[k, j, low:high]
                for c in range(3):
                    share = 1.0 / (starts[c + 1] - starts[c])
                    for s in range(starts[c], starts[c + 1]):
                        kk, jj = k + offsets[s, 0], j + offsets[s, 1]
                        a, z = low + offsets[s, 2], high + offsets[s, 2]
                        p_re, p_im = re[first[b], c, kk, jj, a:z], im[first[b], c, kk, jj, a:z]
                        q_re, q_im = re[second[b], c, kk, jj, a:z], im[second[b], c, kk, jj, a:z]
                        if imaginary[b]:
                            add_products(line, share, p_re, q_im, -share, p_im, q_re)
                        else:
                            add_products(line, share, p_re, q_re, share, p_im, q_im)
                for i in range(line.size):
                    line[i] *= heavy[i]
            combine_row(row, table[k + 1, j], table[k, j + 1], table[k, j], table[k + 1, j + 1])


@njit(cache=True, nogil=True)
def block_integrals(table, cell, weight, scale, out, at):
    """out[r, at : at + LANES] = scale[r] · integrals over box r (:func:`signed_corners`)."""
    for r in range(cell.shape[0]):
        a0 = a1 = a2 = a3 = a4 = a5 = a6 = a7 = 0.0
        for z in range(4):
            wz = weight[r, 0, z] * scale[r]
            plane = table[cell[r, 0, z >> 1] + (z & 1)]
            for y in range(4):
                wzy = wz * weight[r, 1, y]
                line = plane[cell[r, 1, y >> 1] + (y & 1)]
                for x in range(4):
                    w = wzy * weight[r, 2, x]
                    node = line[cell[r, 2, x >> 1] + (x & 1)]
                    a0 += w * node[0]
                    a1 += w * node[1]
                    a2 += w * node[2]
                    a3 += w * node[3]
                    a4 += w * node[4]
                    a5 += w * node[5]
                    a6 += w * node[6]
                    a7 += w * node[7]
        o = out[r, at : at + LANES]
        o[0], o[1], o[2], o[3], o[4], o[5], o[6], o[7] = a0, a1, a2, a3, a4, a5, a6, a7


@njit(cache=True, nogil=True, parallel=True)
def average_entries(
    re, im, offsets, starts, weight, span, first, second, imaginary, cell, corner_weight, scale, tables, out
):
    """Averages of all matrix entries over all boxes of a tile.

    first, second, imaginary : (B·LANES,), padded with entry 0. tables : (T, nz+1, ny+1, nx+1, LANES)
    scratch of T workers, whose number changes no bit. out : (R, B·LANES) float64, written.
    """
    blocks = first.size // LANES
    workers = tables.shape[0]
    for t in prange(workers):
        row = np.empty((LANES, weight.shape[2]))
        for b in range(t, blocks, workers):
            part = slice(b * LANES, (b + 1) * LANES)
            fill_block(
                re,
                im,
                offsets,
                starts,
                weight,
                span,
                first[part],
                second[part],
                imaginary[part],
                row,
                tables[t],
            )
            block_integrals(tables[t], cell, corner_weight, scale, out, b * LANES)


@njit(cache=True, nogil=True)
def box_integrals(table, ez, ey, ex, boxes, out):
    """out[r] = integral of one summed volume over box r; boxes : (R, 6), out : (R,) float64."""
    for r in range(boxes.shape[0]):
        out[r] = box_integral(table, ez, ey, ex, boxes[r])
