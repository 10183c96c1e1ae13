"""Absorbed power by region, and the least limit among the voxels that a cube serves."""

from __future__ import annotations

import numpy as np
from numba import njit, prange

from vop.kernels.cube_search import wholly_inside


@njit(cache=True, nogil=True, parallel=True)
def region_powers(e, offsets, starts, weight, part, first, second, imaginary, out):
    """out[part of cell, b] += weight · Re or Im of the mean of conj(E_first) E_second over its samples.

    e, offsets, starts : see :func:`vop.averaging.samples.read_samples`.
    weight : (nz, ny, nx) float64, σ/2 times volume. part : (nz, ny, nx) uint8, row of ``out``.
    first, second, imaginary : (B,) the entries. out : (parts, B) float64, added to, cells in order.
    """
    nz, ny, nx = weight.shape
    for b in prange(first.size):
        i1, i2, imag = first[b], second[b], imaginary[b]
        for k in range(nz):
            for j in range(ny):
                for i in range(nx):
                    w = weight[k, j, i]
                    if w == 0.0:
                        continue
                    total = 0.0
                    for c in range(3):
                        mean = 0.0
                        for s in range(starts[c], starts[c + 1]):
                            z, y, x = k + offsets[s, 0], j + offsets[s, 1], i + offsets[s, 2]
                            a, d = e[i1, c, z, y, x], e[i2, c, z, y, x]
                            ar, ai = np.float64(a.real), np.float64(a.imag)
                            dr, di = np.float64(d.real), np.float64(d.imag)
                            mean += ar * di - ai * dr if imag else ar * dr + ai * di
                        total += mean / (starts[c + 1] - starts[c])
                    out[part[k, j, i], b] += w * total


@njit(cache=True, nogil=True)
def least_over_used(boxes, used, limit, ez, ey, ex, out):
    """out[r] = min(out[r], limit of each used voxel wholly inside box r); (z, y, x) arrays."""
    for r in range(boxes.shape[0]):
        z0, z1, y0, y1, x0, x1 = wholly_inside(ez, ey, ex, boxes[r])
        for k in range(z0, z1 + 1):
            for j in range(y0, y1 + 1):
                for i in range(x0, x1 + 1):
                    if used[k, j, i] and limit[k, j, i] < out[r]:
                        out[r] = limit[k, j, i]
