"""Summed volumes of piecewise constant densities on rectilinear grids, and boxes read from them.

A summed volume T holds, at each corner of the grid, the integral from the first corner to it. For a
density that is constant in each cell T is trilinear within a cell, so that eight signed trilinear
readings give the exact integral over any axis-aligned box, on graded grids too. Arrays are (z, y, x).
"""

from __future__ import annotations

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
def signed_corners(ez, ey, ex, boxes, nodes, weights):
    """Nodes of a summed volume that each box reads: four along each axis, two for each end, with weights.

    nodes : (R, 3, 4) int64, axes z, y, x; weights : (R, 12) float64, negative at lower ends; written. The
    integral over a box is the sum over its 64 nodes of products of weights.
    """
    for r in range(boxes.shape[0]):
        for axis in range(3):
            edges = ez if axis == 0 else (ey if axis == 1 else ex)
            for end in range(2):
                c, f = locate(edges, boxes[r, 2 * (2 - axis) + end])
                sign = 1.0 if end == 1 else -1.0
                nodes[r, axis, 2 * end] = c
                nodes[r, axis, 2 * end + 1] = c + 1
                weights[r, 4 * axis + 2 * end] = sign * (1.0 - f)
                weights[r, 4 * axis + 2 * end + 1] = sign * f


@njit(cache=True, nogil=True, parallel=True)
def box_integrals(table, ez, ey, ex, boxes, out):
    """out[r] = integral of one summed volume over box r; boxes : (R, 6), out : (R,) float64."""
    for r in prange(boxes.shape[0]):
        out[r] = box_integral(table, ez, ey, ex, boxes[r])
