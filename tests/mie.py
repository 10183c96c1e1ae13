"""A lossy sphere in a plane wave: Bohren & Huffman, Absorption and Scattering of Light by Small
Particles (1983), ch. 4, written anew with scipy.special; the reference of two tests.

The book's time factor is e^{−iωt}; results are conjugated to e^{+jωt}. The wave travels along +z with
E along +x and unit amplitude.
"""

from __future__ import annotations

import numpy as np
from scipy.constants import epsilon_0, mu_0, speed_of_light
from scipy.special import lpmv, spherical_jn, spherical_yn


class MieSphere:
    """Homogeneous sphere of relative permittivity and conductivity (S/m)."""

    def __init__(self, radius_m: float, permittivity: float, sigma: float, frequency_hz: float) -> None:
        omega = 2 * np.pi * frequency_hz
        self.k = omega / speed_of_light
        self.radius = radius_m
        m = np.sqrt(permittivity + 1j * sigma / (omega * epsilon_0))
        x = self.k * radius_m
        self.n = np.arange(1, int(abs(m) * x + 4 * abs(m * x) ** (1 / 3) + 12))
        self.m, n = m, self.n

        def psi(z: complex) -> tuple[np.ndarray, np.ndarray]:
            j = spherical_jn(n, z)
            return z * j, j + z * spherical_jn(n, z, derivative=True)

        def xi(z: complex) -> tuple[np.ndarray, np.ndarray]:
            h = spherical_jn(n, z) + 1j * spherical_yn(n, z)
            dh = spherical_jn(n, z, derivative=True) + 1j * spherical_yn(n, z, derivative=True)
            return z * h, h + z * dh

        (px, dpx), (pm, dpm), (hx, dhx) = psi(x), psi(m * x), xi(x)
        self.a = (m * pm * dpx - px * dpm) / (m * pm * dhx - hx * dpm)
        self.b = (pm * dpx - m * px * dpm) / (pm * dhx - m * hx * dpm)
        self.c = (m * px * dhx - m * hx * dpx) / (pm * dhx - m * hx * dpm)
        self.d = (m * px * dhx - m * hx * dpx) / (m * pm * dhx - hx * dpm)

    def absorbed_power_w(self) -> float:
        """Extinction less scattering, for a peak field of 1 V/m."""
        n, x = self.n, self.k * self.radius
        extinction = 2 / x**2 * np.sum((2 * n + 1) * (self.a + self.b).real)
        scattering = 2 / x**2 * np.sum((2 * n + 1) * (np.abs(self.a) ** 2 + np.abs(self.b) ** 2))
        density = 0.5 / np.sqrt(mu_0 / epsilon_0)
        return float((extinction - scattering) * np.pi * self.radius**2 * density)

    def electric(self, points_m: np.ndarray) -> np.ndarray:
        """E inside, (3, V) complex, V/m, e^{+jωt}."""
        x, y, z = points_m.T
        r = np.sqrt(x**2 + y**2 + z**2)
        theta, phi = np.arccos(z / r), np.arctan2(y, x)
        rho = self.k * self.m * r
        e_r, e_t, e_p = (np.zeros(len(r), complex) for _ in range(3))
        mu = np.cos(theta)
        for n, c, d in zip(self.n, self.c, self.d, strict=True):
            pi = -lpmv(1, n, mu) / np.sin(theta)
            before = -lpmv(1, n - 1, mu) / np.sin(theta) if n > 1 else np.zeros_like(pi)
            tau = n * mu * pi - (n + 1) * before
            j = spherical_jn(n, rho)
            dj = (j + rho * spherical_jn(n, rho, derivative=True)) / rho
            en = 1j**n * (2 * n + 1) / (n * (n + 1))
            # E = Σ En (c M_o1n − i d N_e1n)
            e_t += en * (c * np.cos(phi) * pi * j - 1j * d * np.cos(phi) * tau * dj)
            e_p += en * (-c * np.sin(phi) * tau * j + 1j * d * np.sin(phi) * pi * dj)
            e_r += en * (-1j * d * np.cos(phi) * n * (n + 1) * np.sin(theta) * pi * j / rho)
        st, ct, sp, cp = np.sin(theta), np.cos(theta), np.sin(phi), np.cos(phi)
        e = np.array(
            [
                e_r * st * cp + e_t * ct * cp - e_p * sp,
                e_r * st * sp + e_t * ct * sp + e_p * cp,
                e_r * ct - e_t * st,
            ]
        )
        return e.conj()
