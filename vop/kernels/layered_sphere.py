"""Fields of short current elements near a layered sphere: sums over vector spherical harmonics."""

from __future__ import annotations

import numpy as np
from numba import njit

#: Points of one radius that are summed side by side, so that the compiler can use vector instructions.
LANES = 16
# Rows of LANES numbers in the scratch of sum_harmonics: cos θ, angular functions and their predecessors,
# then real and imaginary parts of nine sums over the degree.
_ROWS = 23


@njit(cache=True, nogil=True, error_model="numpy")
def sum_harmonics(points, first, tables, orders, source, frames, moments, owner, out):
    """Add up E and H of current elements; harmonics of order m = 0 and |m| = 1 about each element.

    With the angular functions π_n and τ_n of Bohren & Huffman and P_n, each field component is a sum
    over n of a factor of the element, a factor of the radius and one of these functions. H has the form
    of E with M and N exchanged.

    Parameters
    ----------
    points : (V, 3) float64, metres from the centre; points of one radius stand together.
    first : (U + 1,) int64, points ``first[u]:first[u + 1]`` have radius number u.
    tables : (6, U, L) complex128, radial factors by radius and degree 1 … L. For E: R_M, R_N/(kr),
        (rR_N)'/(kr). For H: R_N, R_M/(kr), (rR_M)'/(kr), each times jk/(ωμ).
    orders : (S, U) int64, degrees after which the terms of an element no longer count at a radius.
    source : (3, S, L) complex128, factors of each element: of M, of N along it, of N radially.
    frames : (S, 3, 3) float64, rows: the local axes x, y, and z through the element.
    moments : (S, 3) complex128, current times length in the local frame, A·m.
    owner : (S,) int64, the row of ``out`` that an element adds to.
    out : (2, C, 3, V) complex128, E and H, added to.
    """
    work = np.empty(_ROWS * LANES)
    factor = np.empty((tables.shape[2], 18))
    unit = np.empty((LANES, 3))
    local = np.empty(3)
    for u in range(first.size - 1):
        for s in range(frames.shape[0]):
            top = orders[s, u]
            for n in range(1, top + 1):
                _factors(n, tables[:, u, n - 1], source[:, s, n - 1], factor[n - 1])
            for start in range(first[u], first[u + 1], LANES):
                count = min(LANES, first[u + 1] - start)
                for i in range(LANES):
                    v = start + min(i, count - 1)
                    x, y, z = points[v, 0], points[v, 1], points[v, 2]
                    r = np.sqrt(x * x + y * y + z * z)
                    # At the centre the field has one value, and any direction gives it.
                    unit[i, 0], unit[i, 1], unit[i, 2] = (x / r, y / r, z / r) if r > 0 else (0, 0, 1)
                    c = frames[s, 2, 0] * unit[i, 0] + frames[s, 2, 1] * unit[i, 1]
                    work[i] = min(1.0, max(-1.0, c + frames[s, 2, 2] * unit[i, 2]))
                _sum_degrees(top, factor, work)
                px, py, pz = moments[s, 0], moments[s, 1], moments[s, 2]
                for i in range(count):
                    for a in range(2):
                        local[a] = 0.0
                        for b in range(3):
                            local[a] += frames[s, a, b] * unit[i, b]
                    cos_theta = work[i]
                    sine = np.sqrt(local[0] * local[0] + local[1] * local[1])
                    cos_phi, sin_phi = (local[0] / sine, local[1] / sine) if sine > 1e-12 else (1.0, 0.0)
                    q = px * cos_phi + py * sin_phi
                    t = -px * sin_phi + py * cos_phi
                    for kind in range(2):
                        if kind == 0:
                            f_r = q * sine * _sum(work, 2, i) + pz * _sum(work, 3, i)
                            f_theta = q * _sum(work, 0, i) - pz * sine * _sum(work, 4, i)
                            f_phi = t * _sum(work, 1, i)
                        else:
                            f_r = -t * sine * _sum(work, 7, i)
                            f_theta = t * _sum(work, 5, i)
                            f_phi = q * _sum(work, 6, i) + pz * sine * _sum(work, 8, i)
                        # Spherical components to the local axes, then to the common ones.
                        across = f_r * sine + f_theta * cos_theta
                        lx = across * cos_phi - f_phi * sin_phi
                        ly = across * sin_phi + f_phi * cos_phi
                        lz = f_r * cos_theta - f_theta * sine
                        for b in range(3):
                            out[kind, owner[s], b, start + i] += (
                                frames[s, 0, b] * lx + frames[s, 1, b] * ly + frames[s, 2, b] * lz
                            )


@njit(cache=True, nogil=True, error_model="numpy")
def _factors(n, table, source, row):
    """Products of radial and source factors of one degree, as pairs of reals; the order is that of
    :func:`_sum_degrees`."""
    both = n * (n + 1)
    for j in range(9):
        if j == 0:
            z = source[0] * table[0]
        elif j == 1:
            z = source[1] * table[2]
        elif j == 2:
            z = source[1] * table[1] * both
        elif j == 3:
            z = source[2] * table[1] * both
        elif j == 4:
            z = source[2] * table[2]
        elif j == 5:
            z = source[1] * table[3]
        elif j == 6:
            z = source[0] * table[5]
        elif j == 7:
            z = source[0] * table[4] * both
        else:
            z = source[2] * table[3]
        row[2 * j], row[2 * j + 1] = z.real, z.imag


@njit(cache=True, nogil=True, error_model="numpy")
def _sum(work, j, i):
    """Sum number j at lane i."""
    return complex(work[(5 + 2 * j) * LANES + i], work[(6 + 2 * j) * LANES + i])


@njit(cache=True, nogil=True, error_model="numpy")
def _sum_degrees(top, factor, work):
    """Nine sums over the degrees 1 … top at LANES values of cos θ.

    Constant offsets into one array let the compiler see that the rows do not overlap; it then handles
    several lanes with one instruction.
    """
    for i in range(LANES):
        work[LANES + i] = 0.0
        work[2 * LANES + i] = 1.0
        work[3 * LANES + i] = 1.0
        work[4 * LANES + i] = work[i]
    for i in range(5 * LANES, _ROWS * LANES):
        work[i] = 0.0
    for n in range(1, top + 1):
        row = factor[n - 1]
        m_re, m_im, t_re, t_im, r_re, r_im = row[0], row[1], row[2], row[3], row[4], row[5]
        zr_re, zr_im, zt_re, zt_im = row[6], row[7], row[8], row[9]
        hm_re, hm_im, ht_re, ht_im, hr_re, hr_im = row[10], row[11], row[12], row[13], row[14], row[15]
        hz_re, hz_im = row[16], row[17]
        low, high, odd = float(n), float(n + 1), float(2 * n + 1)
        by_low, by_high = 1.0 / low, 1.0 / high
        for i in range(LANES):
            c = work[i]
            pi_before = work[LANES + i]
            pi = work[2 * LANES + i]
            p_before = work[3 * LANES + i]
            p = work[4 * LANES + i]
            tau = low * (c * pi) - high * pi_before
            work[5 * LANES + i] += m_re * pi + t_re * tau
            work[6 * LANES + i] += m_im * pi + t_im * tau
            work[7 * LANES + i] += m_re * tau + t_re * pi
            work[8 * LANES + i] += m_im * tau + t_im * pi
            work[9 * LANES + i] += r_re * pi
            work[10 * LANES + i] += r_im * pi
            work[11 * LANES + i] += zr_re * p
            work[12 * LANES + i] += zr_im * p
            work[13 * LANES + i] += zt_re * pi
            work[14 * LANES + i] += zt_im * pi
            work[15 * LANES + i] += hm_re * pi - ht_re * tau
            work[16 * LANES + i] += hm_im * pi - ht_im * tau
            work[17 * LANES + i] += ht_re * pi - hm_re * tau
            work[18 * LANES + i] += ht_im * pi - hm_im * tau
            work[19 * LANES + i] += hr_re * pi
            work[20 * LANES + i] += hr_im * pi
            work[21 * LANES + i] += hz_re * pi
            work[22 * LANES + i] += hz_im * pi
            work[LANES + i] = pi
            work[2 * LANES + i] = (odd * (c * pi) - high * pi_before) * by_low
            work[3 * LANES + i] = p
            work[4 * LANES + i] = (odd * (c * p) - low * p_before) * by_high
