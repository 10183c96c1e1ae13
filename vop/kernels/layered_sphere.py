"""Fields of short current elements near a layered sphere: sums over vector spherical harmonics."""

from __future__ import annotations

import numpy as np
from numba import njit, prange


@njit(cache=True, nogil=True, parallel=True)
def sum_harmonics(points, which, tables, orders, source, frames, moments, owner, magnetic, out):
    """Add up the fields of current elements at points; harmonics of order m = 0 and 1 about each element.

    Parameters
    ----------
    points : (V, 3) float64, metres from the centre, none at the centre.
    which : (V,) int64, row of each point's radius in ``tables``.
    tables : (3, U, L) complex128, radial factors by radius and degree 1 … L. Electric: R_M,
        R_N/(kr), (rR_N)'/(kr). Magnetic: R_N, R_M/(kr), (rR_M)'/(kr), each times jk/(ωμ).
    orders : (S, U) int64, degrees after which the terms of an element no longer count at a radius.
    source : (3, S, L) complex128, factors of each element: of M, of N along it, of N radially.
    frames : (S, 3, 3) float64, rows: the local axes x, y, and z through the element.
    moments : (S, 3) complex128, current times length in the local frame, A·m.
    owner : (S,) int64, the row of ``out`` that an element adds to.
    magnetic : bool, which of the two fields.
    out : (C, 3, V) complex128, added to.
    """
    for v in prange(points.shape[0]):
        x, y, z = points[v]
        r = np.sqrt(x * x + y * y + z * z)
        u = which[v]
        local = np.zeros(3)
        for s in range(frames.shape[0]):
            for a in range(3):
                local[a] = (frames[s, a, 0] * x + frames[s, a, 1] * y + frames[s, a, 2] * z) / r
            c = min(1.0, max(-1.0, local[2]))
            rho = np.sqrt(local[0] * local[0] + local[1] * local[1])
            cos_phi, sin_phi = (local[0] / rho, local[1] / rho) if rho > 1e-12 else (1.0, 0.0)
            sine = rho
            m_pi = m_tau = nr_pi = nt_pi = nt_tau = zr = zt = 0.0j
            pi_before, pi_now = 0.0, 1.0
            p_before, p_now = 1.0, c
            for n in range(1, orders[s, u] + 1):
                tau = n * c * pi_now - (n + 1) * pi_before
                a0, a1, a2 = tables[0, u, n - 1], tables[1, u, n - 1], tables[2, u, n - 1]
                if magnetic:
                    along_m, along_n = source[1, s, n - 1], source[0, s, n - 1]
                else:
                    along_m, along_n = source[0, s, n - 1], source[1, s, n - 1]
                radial = source[2, s, n - 1]
                m_pi += along_m * a0 * pi_now
                m_tau += along_m * a0 * tau
                nr_pi += along_n * a1 * (n * (n + 1) * pi_now)
                nt_pi += along_n * a2 * pi_now
                nt_tau += along_n * a2 * tau
                if magnetic:
                    zt += radial * a0 * pi_now
                else:
                    zr += radial * a1 * (n * (n + 1) * p_now)
                    zt += radial * a2 * pi_now
                pi_next = ((2 * n + 1) * c * pi_now - (n + 1) * pi_before) / n
                p_next = ((2 * n + 1) * c * p_now - n * p_before) / (n + 1)
                pi_before, pi_now = pi_now, pi_next
                p_before, p_now = p_now, p_next
            px, py, pz = moments[s]
            q = px * cos_phi + py * sin_phi
            t = -px * sin_phi + py * cos_phi
            if magnetic:
                f_r = -t * sine * nr_pi
                f_theta = t * (m_pi - nt_tau)
                f_phi = q * (nt_pi - m_tau) + pz * sine * zt
            else:
                f_r = q * sine * nr_pi + pz * zr
                f_theta = q * (m_pi + nt_tau) - pz * sine * zt
                f_phi = t * (m_tau + nt_pi)
            # Spherical components to the local axes, then to the common ones.
            lx = f_r * sine * cos_phi + f_theta * c * cos_phi - f_phi * sin_phi
            ly = f_r * sine * sin_phi + f_theta * c * sin_phi + f_phi * cos_phi
            lz = f_r * c - f_theta * sine
            for a in range(3):
                out[owner[s], a, v] += frames[s, 0, a] * lx + frames[s, 1, a] * ly + frames[s, 2, a] * lz
