"""Search for the averaging cubes of IEC/IEEE 62704-1: sides from mass, validity, use, candidates."""

from __future__ import annotations

import numpy as np
from numba import njit, prange

from vop.kernels.averaging import locate
from vop.kernels.cube_sides import find_side, integral_at, make_box, set_ends

#: Ties of "10 %", "5 %" and "wholly inside" resolve to more candidates within this.
_TIE = 1e-9
#: Neighbouring voxels in a row, each of which starts the search at the side of the one before.
_RUN = 64


@njit(cache=True, nogil=True)
def _layer(edges, low, high, towards_high):
    # Index of the cells that a face cuts, on the cube's inner side of it; −1 outside the grid.
    if towards_high:
        if high > edges[edges.size - 1]:
            return -1
        c, f = locate(edges, high)
        return c - 1 if f <= _TIE and c > 0 else c
    if low < edges[0]:
        return -1
    c, f = locate(edges, low)
    return c + 1 if f >= 1.0 - _TIE and c < edges.size - 2 else c


@njit(cache=True, nogil=True)
def _range(edges, low, high):
    # Cells that overlap (low, high) by more than a hair.
    a, f = locate(edges, low)
    if f >= 1.0 - _TIE and a < edges.size - 2:
        a += 1
    b, g = locate(edges, high)
    if g <= _TIE and b > 0:
        b -= 1
    return a, b


@njit(cache=True, nogil=True)
def faces_meet_tissue(body, ez, ey, ex, box):
    """Whether each face of the box has tissue on its inner side."""
    x0, x1 = _range(ex, box[0], box[1])
    y0, y1 = _range(ey, box[2], box[3])
    z0, z1 = _range(ez, box[4], box[5])
    for towards_high in (False, True):
        i = _layer(ex, box[0], box[1], towards_high)
        if i < 0 or not body[z0 : z1 + 1, y0 : y1 + 1, i].any():
            return False
        j = _layer(ey, box[2], box[3], towards_high)
        if j < 0 or not body[z0 : z1 + 1, j, x0 : x1 + 1].any():
            return False
        k = _layer(ez, box[4], box[5], towards_high)
        if k < 0 or not body[k, y0 : y1 + 1, x0 : x1 + 1].any():
            return False
    return True


@njit(cache=True, nogil=True, parallel=True)
def centred_cubes(table, body, rho, ez, ey, ex, voxels, wanted, longest, boxes, state):
    """Centred cube of each voxel; state 1 valid, 3 not valid, 4 no cube holds the mass.

    table : summed volumes (nz+1, ny+1, nx+1, 2) of mass and of tissue volume.
    voxels : (V, 3) int64 of (k, j, i). boxes : (V, 6), state : (V,) uint8, written.
    """
    runs = (voxels.shape[0] + _RUN - 1) // _RUN
    for run in prange(runs):
        at, slope = np.empty((3, 2)), np.empty((3, 2))
        cell, here, change = np.empty((3, 2), np.int64), np.empty((3, 4)), np.empty((3, 4))
        guess = 0.0
        for v in range(run * _RUN, min((run + 1) * _RUN, voxels.shape[0])):
            k, j, i = voxels[v]
            if guess <= 0.0:
                guess = (wanted / rho[k, j, i]) ** (1.0 / 3.0)
            set_ends(1, k, j, i, ez, ey, ex, at, slope)
            side, t = find_side(table, ez, ey, ex, at, slope, wanted, guess, longest, cell, here, change)
            guess = side
            if side < 0.0:
                state[v] = 4
                continue
            make_box(at, slope, side, boxes[v])
            volume = side * side * side
            background = volume - integral_at(table, 1, cell, here, change, t)
            if background <= _TIE * volume or (
                background <= (0.1 + _TIE) * volume and faces_meet_tissue(body, ez, ey, ex, boxes[v])
            ):
                state[v] = 1
            else:
                state[v] = 3


@njit(cache=True, nogil=True)
def _inside(edges, low, high):
    # Cells wholly inside [low, high], ties within a hair counting as inside.
    a, f = locate(edges, low)
    if f > _TIE:
        a += 1
    b, g = locate(edges, high)
    if g < 1.0 - _TIE:
        b -= 1
    return a, b


@njit(cache=True, nogil=True)
def wholly_inside(ez, ey, ex, box):
    """Index ranges (inclusive) of the cells wholly inside a box."""
    x0, x1 = _inside(ex, box[0], box[1])
    y0, y1 = _inside(ey, box[2], box[3])
    z0, z1 = _inside(ez, box[4], box[5])
    return z0, z1, y0, y1, x0, x1


@njit(cache=True, nogil=True)
def mark_used(boxes, state, ez, ey, ex, count):
    """Number of valid cubes that wholly hold each cell: marks at corners, then sums, in place.

    count : (nz+1, ny+1, nx+1) int32 zeros; the result is count[:nz, :ny, :nx].
    """
    for v in range(boxes.shape[0]):
        if state[v] != 1:
            continue
        z0, z1, y0, y1, x0, x1 = wholly_inside(ez, ey, ex, boxes[v])
        if z1 < z0 or y1 < y0 or x1 < x0:
            continue
        for a, z in ((1, z0), (-1, z1 + 1)):
            for b, y in ((1, y0), (-1, y1 + 1)):
                count[z, y, x0] += a * b
                count[z, y, x1 + 1] -= a * b
    nz, ny, nx = count.shape
    for k in range(nz):
        for j in range(ny):
            for i in range(1, nx):
                count[k, j, i] += count[k, j, i - 1]
        for j in range(1, ny):
            for i in range(nx):
                count[k, j, i] += count[k, j - 1, i]
        if k > 0:
            for j in range(ny):
                for i in range(nx):
                    count[k, j, i] += count[k - 1, j, i]


@njit(cache=True, nogil=True, parallel=True)
def face_cubes(table, rho, ez, ey, ex, voxels, wanted, longest, boxes, chosen):
    """The six face-anchored cubes of each voxel, and which of them compete: 5 % of the least volume.

    table : as for :func:`centred_cubes`. boxes : (V, 6, 6), chosen : (V, 6) bool, written.
    """
    within = 1.05 * (1.0 + _TIE)
    for v in prange(voxels.shape[0]):
        at, slope = np.empty((3, 2)), np.empty((3, 2))
        cell, here, change = np.empty((3, 2), np.int64), np.empty((3, 4)), np.empty((3, 4))
        k, j, i = voxels[v]
        sides = np.empty(6)
        least = longest
        for f in range(6):
            # A cube that is larger than the least so far allows need not be followed to its end.
            limit = min(longest, least * (1.06 ** (1.0 / 3.0)))
            guess = (wanted / rho[k, j, i]) ** (1.0 / 3.0)
            set_ends(f + 2, k, j, i, ez, ey, ex, at, slope)
            sides[f], _ = find_side(table, ez, ey, ex, at, slope, wanted, guess, limit, cell, here, change)
            if sides[f] > 0.0:
                make_box(at, slope, sides[f], boxes[v, f])
                least = min(least, sides[f])
        for f in range(6):
            chosen[v, f] = sides[f] > 0.0 and sides[f] ** 3 <= within * least**3
