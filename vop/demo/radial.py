"""Spherical Bessel functions of complex argument, scaled so that no degree over- or underflows.

j_n(x) = xⁿ/(2n+1)!! · ĵ_n(x) and h_n(x) = i·(2n−1)!!/xⁿ⁺¹ · ĥ_n(x), with h_n = j_n − i·y_n, the outgoing
one for e^{+jωt}. Both ĵ_n and ĥ_n tend to 1 for x → 0 and for n → ∞. Recurrences from
f_{n−1} + f_{n+1} = (2n+1)/x · f_n and derivatives from (x f_n)' = (n+1) f_n − x f_{n+1} = x f_{n−1} − n f_n
(Abramowitz & Stegun, Handbook of Mathematical Functions, 10.1.19 ff.).
"""

from __future__ import annotations

import numpy as np


def regular(n_max: int, x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """ĵ_n and the likewise scaled (x j_n)' for n = 1 … n_max: two arrays (U, n_max) complex128.

    x : (U,) complex. Downward recurrence, the stable direction, from a degree so high that the power
    series converges without cancellation: |x|² ≤ n.
    """
    x2 = np.asarray(x, dtype=np.complex128) ** 2
    top = max(n_max + 2, int(np.ceil(np.abs(x2).max(initial=0.0))))
    above, here = _series(top + 1, x2), _series(top, x2)
    value = np.empty((len(x2), n_max + 2), dtype=np.complex128)
    for n in range(top, 0, -1):
        if n <= n_max + 1:
            value[:, n] = here
        above, here = here, here - x2 / ((2 * n + 1) * (2 * n + 3)) * above
    degrees = np.arange(1, n_max + 1)
    slope = (degrees + 1) * value[:, 1:-1] - x2[:, None] / (2 * degrees + 3) * value[:, 2:]
    return value[:, 1:-1], slope


def _series(n: int, x2: np.ndarray) -> np.ndarray:
    """ĵ_n = Σ_k (−x²/2)^k / (k! (2n+3)(2n+5)…(2n+2k+1)) (Abramowitz & Stegun 10.1.2)."""
    term = total = np.ones_like(x2)
    for k in range(1, 40):  # each term is at most 1/(4k) of the one before
        term = term * (-0.5 * x2) / (k * (2 * n + 2 * k + 1))
        total = total + term
    return total


def outgoing(n_max: int, x: np.ndarray, shrink: np.ndarray | float = 1.0) -> tuple[np.ndarray, np.ndarray]:
    """tⁿ⁺¹ĥ_n and the likewise scaled (x h_n)' for n = 1 … n_max: two arrays (U, n_max) complex128.

    x : (U,) complex. shrink : t, (U,) or a number; with t = a/r the functions stay in range however
    far the radius r is from a. Upward recurrence, the stable direction.
    """
    x = np.asarray(x, dtype=np.complex128)
    t = np.broadcast_to(np.asarray(shrink, dtype=np.float64), x.shape)
    reference = (x * t) ** 2
    value = np.empty((len(x), n_max + 1), dtype=np.complex128)
    value[:, 0] = t * np.exp(-1j * x)
    value[:, 1] = t * value[:, 0] * (1 + 1j * x)
    for n in range(1, n_max):
        value[:, n + 1] = t * value[:, n] - reference / ((2 * n + 1) * (2 * n - 1)) * value[:, n - 1]
    degrees = np.arange(1, n_max + 1)
    slope = -degrees * value[:, 1:] + (x**2 * t)[:, None] / (2 * degrees - 1) * value[:, :-1]
    return value[:, 1:], slope
