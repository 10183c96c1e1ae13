"""Search for the averaging cubes of IEC/IEEE 62704-1: sides from mass, validity, use, candidates."""

from __future__ import annotations

import numpy as np
from numba import njit, prange

from vop.kernels.averaging import box_integral, locate

#: Relative error of a cube's mass at which the search for its side ends; the standard asks 1e-4.
_MASS_ERROR = 1e-10
#: Ties of "10 %", "5 %" and "wholly inside" resolve to more candidates within this.
_TIE = 1e-9
#: Neighbouring voxels in a row, each of which starts the search at the side of the one before.
_RUN = 64


@njit(cache=True, nogil=True)
def make_box(kind, side, k, j, i, ez, ey, ex, box):
    """Box of a cube: centred on the voxel (kind 1), or with the voxel's outer face in one of its faces."""
    x = 0.5 * (ex[i] + ex[i + 1])
    y = 0.5 * (ey[j] + ey[j + 1])
    z = 0.5 * (ez[k] + ez[k + 1])
    h = 0.5 * side
    box[0], box[1], box[2], box[3], box[4], box[5] = x - h, x + h, y - h, y + h, z - h, z + h
    if kind == 2:
        box[0], box[1] = ex[i], ex[i] + side
    elif kind == 3:
        box[0], box[1] = ex[i + 1] - side, ex[i + 1]
    elif kind == 4:
        box[2], box[3] = ey[j], ey[j] + side
    elif kind == 5:
        box[2], box[3] = ey[j + 1] - side, ey[j + 1]
    elif kind == 6:
        box[4], box[5] = ez[k], ez[k] + side
    elif kind == 7:
        box[4], box[5] = ez[k + 1] - side, ez[k + 1]


@njit(cache=True, nogil=True)
def _mass(table, kind, side, k, j, i, ez, ey, ex, box):
    make_box(kind, side, k, j, i, ez, ey, ex, box)
    return box_integral(table, ez, ey, ex, box)


@njit(cache=True, nogil=True)
def find_side(table, kind, k, j, i, ez, ey, ex, wanted, guess, longest, box):
    """A side whose cube holds the mass ``wanted``; −1 where even ``longest`` does not.

    The mass is nearly proportional to the volume, so that secants over side³ from a good guess arrive in
    a few steps; where they do not, a bracket and the Illinois form of regula falsi (Dowell & Jarratt, BIT
    1971;11:168) do, for the mass never falls as the side grows.
    """
    good = _MASS_ERROR * wanted
    before, f_before = 0.0, -wanted
    now = min(guess, longest) ** 3
    for _ in range(8):
        side = now ** (1.0 / 3.0)
        f = _mass(table, kind, side, k, j, i, ez, ey, ex, box) - wanted
        if abs(f) <= good:
            return side
        if f == f_before:
            break
        following = now - f * (now - before) / (f - f_before)
        before, f_before = now, f
        now = following
        if not (now > 0.0 and now < longest * longest * longest):
            break
    low, f_low = 0.0, -wanted
    high = min(guess, longest)
    f_high = _mass(table, kind, high, k, j, i, ez, ey, ex, box) - wanted
    while f_high < -good:
        if high >= longest:
            return -1.0
        low, f_low = high, f_high
        high = min(1.2 * high, longest)
        f_high = _mass(table, kind, high, k, j, i, ez, ey, ex, box) - wanted
    last = 0
    for _ in range(200):
        if abs(f_high) <= good or high - low <= 1e-15 * high:
            break
        c_low, c_high = low * low * low, high * high * high
        x = ((c_low * f_high - c_high * f_low) / (f_high - f_low)) ** (1.0 / 3.0)
        if not (x > low and x < high):
            x = 0.5 * (low + high)
        f = _mass(table, kind, x, k, j, i, ez, ey, ex, box) - wanted
        if f < -good:
            low, f_low = x, f
            if last == -1:
                f_high *= 0.5
            last = -1
        else:
            high, f_high = x, f
            if last == 1:
                f_low *= 0.5
            last = 1
    return high


@njit(cache=True, nogil=True)
def smallest_side(table, kind, k, j, i, ez, ey, ex, wanted, side, box):
    """Where the mass has a plateau (only a cube with background can), its beginning; else ``side``."""
    enough = wanted * (1.0 - _MASS_ERROR)
    high = side * (1.0 - 1e-6)
    if _mass(table, kind, high, k, j, i, ez, ey, ex, box) < enough:
        return side
    low = 0.0
    while high - low > 1e-12 * high:
        middle = 0.5 * (low + high)
        if _mass(table, kind, middle, k, j, i, ez, ey, ex, box) >= enough:
            high = middle
        else:
            low = middle
    return high


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
def centred_cubes(mass, tissue, body, rho, ez, ey, ex, voxels, wanted, longest, boxes, state):
    """Centred cube of each voxel; state 1 valid, 3 not valid, 4 no cube holds the mass.

    mass, tissue : summed volumes (nz+1, ny+1, nx+1) of mass and of tissue volume.
    voxels : (V, 3) int64 of (k, j, i). boxes : (V, 6), state : (V,) uint8, written.
    """
    runs = (voxels.shape[0] + _RUN - 1) // _RUN
    for run in prange(runs):
        guess = 0.0
        for v in range(run * _RUN, min((run + 1) * _RUN, voxels.shape[0])):
            k, j, i = voxels[v]
            box = boxes[v]
            if guess <= 0.0:
                guess = (wanted / rho[k, j, i]) ** (1.0 / 3.0)
            side = find_side(mass, 1, k, j, i, ez, ey, ex, wanted, guess, longest, box)
            guess = side
            if side < 0.0:
                state[v] = 4
                continue
            make_box(1, side, k, j, i, ez, ey, ex, box)
            volume = side * side * side
            background = volume - box_integral(tissue, ez, ey, ex, box)
            if background <= 1e-12 * volume:
                state[v] = 1
                continue
            shortest = smallest_side(mass, 1, k, j, i, ez, ey, ex, wanted, side, box)
            make_box(1, shortest, k, j, i, ez, ey, ex, box)
            volume = shortest * shortest * shortest
            background = volume - box_integral(tissue, ez, ey, ex, box)
            if background <= (0.1 + _TIE) * volume and faces_meet_tissue(body, ez, ey, ex, box):
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
def face_cubes(mass, rho, ez, ey, ex, voxels, wanted, longest, boxes, chosen):
    """The six face-anchored cubes of each voxel, and which of them compete: 5 % of the least volume.

    boxes : (V, 6, 6), chosen : (V, 6) bool, written.
    """
    for v in prange(voxels.shape[0]):
        k, j, i = voxels[v]
        sides = np.empty(6)
        least = np.inf
        for f in range(6):
            guess = (wanted / rho[k, j, i]) ** (1.0 / 3.0) * 1.02
            sides[f] = find_side(mass, f + 2, k, j, i, ez, ey, ex, wanted, guess, longest, boxes[v, f])
            if sides[f] > 0.0:
                sides[f] = smallest_side(mass, f + 2, k, j, i, ez, ey, ex, wanted, sides[f], boxes[v, f])
                make_box(f + 2, sides[f], k, j, i, ez, ey, ex, boxes[v, f])
                least = min(least, sides[f])
        for f in range(6):
            chosen[v, f] = sides[f] > 0.0 and sides[f] ** 3 <= 1.05 * (1.0 + _TIE) * least**3
