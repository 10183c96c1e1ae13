"""The side of a cube that holds a given mass: the root of a cubic, exact between cell faces.

Let every face of a box move linearly with the side s. While no face crosses a cell face, the integral of
a piecewise constant density over the box is a polynomial of third degree in s: each of the 4 × 4 × 4
nodes of the summed volume that the box reads has a weight that is a product of three linear functions.
So one reading of those nodes gives the mass for a whole interval of sides, its *piece*; the mass never
falls as the box grows, so that pieces bracket the root, and within its piece Newton's method ends at
the last bit. The answer does not depend on where the search began.
"""

from __future__ import annotations

import numpy as np
from numba import njit

#: Masses that differ by less are equal: rounding of summed volumes stays below, 1e-4 is what is asked.
MASS_TIE = 1e-10
#: A relative step of the side that passes a cell face.
_NUDGE = 1e-12


@njit(cache=True, nogil=True, error_model="numpy")
def set_ends(kind, k, j, i, ez, ey, ex, at, slope):
    """Ends of the cube of a voxel: at + slope · side, both (3, 2) for axes z, y, x and low, high.

    kind : :class:`vop.cubes.CubeKind`; centred, or with the voxel's outer face in one of its faces.
    """
    at[0, :] = 0.5 * (ez[k] + ez[k + 1])
    at[1, :] = 0.5 * (ey[j] + ey[j + 1])
    at[2, :] = 0.5 * (ex[i] + ex[i + 1])
    slope[:, 0] = -0.5
    slope[:, 1] = 0.5
    if kind >= 2:
        axis, high = 2 - (kind - 2) // 2, (kind - 2) % 2
        edges, c = (ez, k) if axis == 0 else ((ey, j) if axis == 1 else (ex, i))
        at[axis, :] = edges[c + high]
        slope[axis, 0] = -1.0 if high == 1 else 0.0
        slope[axis, 1] = 0.0 if high == 1 else 1.0


@njit(cache=True, nogil=True, error_model="numpy")
def make_box(at, slope, side, box):
    """Write x0, x1, y0, y1, z0, z1 of the cube."""
    for axis in range(3):
        for end in range(2):
            box[2 * (2 - axis) + end] = at[axis, end] + slope[axis, end] * side


@njit(cache=True, nogil=True, error_model="numpy")
def find_piece(ez, ey, ex, at, slope, side, cell, here, change):
    """Nodes that the cube of ``side`` reads, and how far the side may move until they change.

    cell : (3, 2) int64, here, change : (3, 4) float64, written: node weights are here + change · t for
    the side ``side`` + t. Returns the interval of t, a closed one that holds 0.
    """
    t_low, t_high = -np.inf, np.inf
    for axis in range(3):
        edges = ez if axis == 0 else (ey if axis == 1 else ex)
        last = edges.size - 1
        per_metre = last / (edges[last] - edges[0])
        for end in range(2):
            rate = slope[axis, end]
            x = at[axis, end] + rate * side
            sign = 1.0 if end == 1 else -1.0
            low, high, f, moves = -np.inf, np.inf, 0.0, 0.0
            if x < edges[0]:
                c, high = 0, edges[0]
            elif x > edges[last]:
                c, low, f = last - 1, edges[last], 1.0
            else:
                # Where it would be on a uniform axis, then step by step: right at once on most grids.
                c = min(int((x - edges[0]) * per_metre), last - 1)
                while edges[c] > x:
                    c -= 1
                while edges[c + 1] <= x and c < last - 1:
                    c += 1
                low, high = edges[c], edges[c + 1]
                per_cell = 1.0 / (high - low)
                f = (x - low) * per_cell
                moves = sign * rate * per_cell
            cell[axis, end] = c
            here[axis, 2 * end] = sign * (1.0 - f)
            here[axis, 2 * end + 1] = sign * f
            change[axis, 2 * end] = -moves
            change[axis, 2 * end + 1] = moves
            if rate != 0.0:
                per_rate = 1.0 / rate
                one, two = (low - x) * per_rate, (high - x) * per_rate
                t_low = max(t_low, min(one, two))
                t_high = min(t_high, max(one, two))
    return min(t_low, 0.0), max(t_high, 0.0)


@njit(cache=True, nogil=True, error_model="numpy")
def mass_polynomial(table, m, cell, here, change):
    """Coefficients of t⁰ … t³ of the integral over the cube; table (nz+1, ny+1, nx+1, M), density m."""
    p0 = p1 = p2 = p3 = 0.0
    for z in range(4):
        plane = table[cell[0, z >> 1] + (z & 1)]
        q0 = q1 = q2 = 0.0
        for y in range(4):
            line = plane[cell[1, y >> 1] + (y & 1)]
            a, b = cell[2, 0], cell[2, 1]
            n0, n1, n2, n3 = line[a, m], line[a + 1, m], line[b, m], line[b + 1, m]
            r0 = here[2, 0] * n0 + here[2, 1] * n1 + here[2, 2] * n2 + here[2, 3] * n3
            # Both nodes of an end change by the same, with opposite signs.
            r1 = change[2, 1] * (n1 - n0) + change[2, 3] * (n3 - n2)
            q0 += here[1, y] * r0
            q1 += here[1, y] * r1 + change[1, y] * r0
            q2 += change[1, y] * r1
        p0 += here[0, z] * q0
        p1 += here[0, z] * q1 + change[0, z] * q0
        p2 += here[0, z] * q2 + change[0, z] * q1
        p3 += change[0, z] * q2
    return p0, p1, p2, p3


@njit(cache=True, nogil=True, error_model="numpy")
def integral_at(table, m, cell, here, change, t):
    """Integral of density m over the cube of the piece's side + t."""
    total = 0.0
    for z in range(4):
        plane = table[cell[0, z >> 1] + (z & 1)]
        wz = here[0, z] + change[0, z] * t
        for y in range(4):
            line = plane[cell[1, y >> 1] + (y & 1)]
            w = wz * (here[1, y] + change[1, y] * t)
            a, b = cell[2, 0], cell[2, 1]
            total += w * (
                (here[2, 0] + change[2, 0] * t) * line[a, m]
                + (here[2, 1] + change[2, 1] * t) * line[a + 1, m]
                + (here[2, 2] + change[2, 2] * t) * line[b, m]
                + (here[2, 3] + change[2, 3] * t) * line[b + 1, m]
            )
    return total


@njit(cache=True, nogil=True, error_model="numpy")
def _root(p0, p1, p2, p3, wanted, low, high, side):
    # Newton in a bracket; the polynomial does not fall in it.
    t = min(max(0.0, low), high)
    for _ in range(100):
        lack = wanted - (p0 + t * (p1 + t * (p2 + t * p3)))
        if lack > 0.0:
            low = t
        else:
            high = t
        rise = p1 + t * (2.0 * p2 + t * 3.0 * p3)
        following = t + lack / rise if rise > 0.0 else 0.5 * (low + high)
        if not (following >= low and following <= high):
            following = 0.5 * (low + high)
        if abs(following - t) <= 1e-16 * side:
            return following
        t = following
    return t


@njit(cache=True, nogil=True, error_model="numpy")
def find_side(table, ez, ey, ex, at, slope, wanted, guess, longest, cell, here, change):
    """Smallest side whose cube holds the mass ``wanted`` (density 0 of ``table``).

    Returns the side and t, which with the piece left in ``cell``, ``here``, ``change`` gives any
    integral over that cube (:func:`integral_at`); −1 and 0 where even ``longest`` holds less.
    """
    enough = wanted * (1.0 - MASS_TIE)
    low, high = 0.0, longest
    side = min(guess, longest)
    bounded = False
    for step in range(1000):
        t_low, t_high = find_piece(ez, ey, ex, at, slope, side, cell, here, change)
        t_low, t_high = max(t_low, low - side), min(t_high, high - side)
        p0, p1, p2, p3 = mass_polynomial(table, 0, cell, here, change)
        m_high = p0 + t_high * (p1 + t_high * (p2 + t_high * p3))
        if m_high < enough:
            low = side + t_high
            if low >= longest * (1.0 - _NUDGE):
                return -1.0, 0.0
            # As if the mean density stayed the same, but no faster than 1.3 into the unknown.
            following = 1.3 * low
            if m_high * 2.197 > wanted:
                following = max(low * (wanted / m_high) ** (1.0 / 3.0), low * (1.0 + _NUDGE))
            if following >= high and not bounded:
                following = longest
        else:
            m_low = p0 + t_low * (p1 + t_low * (p2 + t_low * p3))
            if m_low < enough:
                t = _root(p0, p1, p2, p3, wanted, t_low, t_high, side)
                return side + t, t
            high, bounded = side + t_low, True
            following = min(side * (wanted / p0) ** (1.0 / 3.0), high * (1.0 - _NUDGE))
        if bounded and high - low <= _NUDGE * high:
            side = high
            find_piece(ez, ey, ex, at, slope, side, cell, here, change)
            return side, 0.0
        if bounded and (not (following > low and following < high) or step % 8 == 7):
            following = 0.5 * (low + high)
        side = following
    return -1.0, 0.0
