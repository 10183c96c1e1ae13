"""Summed volumes of piecewise constant densities on rectilinear grids, and boxes read from them.

A summed volume T holds, at each corner of the grid, the integral from the first corner to it. For a
density that is constant in each cell T is trilinear within a cell, so that eight signed trilinear
readings give the exact integral over any axis-aligned box, on graded grids too. Arrays are (z, y, x).
"""

from __future__ import annotations

import numpy as np
from numba import njit, prange


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
    low, high = 0, last
    while high - low > 1:
        middle = (low + high) >> 1
        if edges[middle] <= x:
            low = middle
        else:
            high = middle
    return low, (x - edges[low]) / (edges[low + 1] - edges[low])


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


@njit(cache=True, nogil=True, parallel=True)
def power_table(e, offsets, starts, weight, first, second, imaginary, table):
    """Absorbed power of each cell and matrix entry, at [1:, 1:, 1:] of ``table``; then summed volumes.

    e : (n, 3, samples z, y, x) complex64, V/m.
    offsets : (S, 3) int64, starts : (4,) int64; component c of a cell has the samples
        offsets[starts[c] : starts[c+1]] relative to the cell's index; their outer products are averaged.
    weight : (nz, ny, nx) float64, σ/2 times volume; cells of weight 0 are never read.
    first, second, imaginary : (B,) the entries: Re or Im of conj(E_first) E_second.
    table : (B, nz+1, ny+1, nx+1) float64, written.
    """
    nz, ny, nx = weight.shape
    for b in prange(first.size):
        i1, i2, imag = first[b], second[b], imaginary[b]
        t = table[b]
        t[0] = 0.0
        for k in range(nz):
            t[k + 1, 0] = 0.0
            for j in range(ny):
                t[k + 1, j + 1, 0] = 0.0
                run = 0.0
                for i in range(nx):
                    w = weight[k, j, i]
                    if w > 0.0:
                        total = 0.0
                        for c in range(3):
                            part = 0.0
                            for s in range(starts[c], starts[c + 1]):
                                a = e[i1, c, k + offsets[s, 0], j + offsets[s, 1], i + offsets[s, 2]]
                                d = e[i2, c, k + offsets[s, 0], j + offsets[s, 1], i + offsets[s, 2]]
                                ar, ai = np.float64(a.real), np.float64(a.imag)
                                dr, di = np.float64(d.real), np.float64(d.imag)
                                if imag:
                                    part += ar * di - ai * dr
                                else:
                                    part += ar * dr + ai * di
                            total += part / (starts[c + 1] - starts[c])
                        run += w * total
                    t[k + 1, j + 1, i + 1] = run + t[k + 1, j, i + 1]
            if k > 0:
                for j in range(1, ny + 1):
                    for i in range(1, nx + 1):
                        t[k + 1, j, i] += t[k, j, i]


@njit(cache=True, nogil=True, parallel=True)
def boxes_from_tables(table, ez, ey, ex, boxes, scale, out):
    """out[r, b] = scale[r] · integral of density b over box r.

    table : (B, nz+1, ny+1, nx+1); boxes : (R, 6); scale : (R,); out : (R, B), written.
    """
    for r in prange(boxes.shape[0]):
        for b in range(table.shape[0]):
            out[r, b] = scale[r] * box_integral(table[b], ez, ey, ex, boxes[r])
