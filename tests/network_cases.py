"""Invented passive networks shared by the tests of vop.network."""

from __future__ import annotations

import numpy as np

FREQUENCY_HZ = 297.2e6
Z0_OHM = 50.0


def passive_s(seed: int, n: int, largest: float = 0.95, reciprocal: bool = False) -> np.ndarray:
    """(n, n) random S whose largest singular value is ``largest``."""
    rng = np.random.default_rng(seed)
    s = rng.normal(size=(n, n)) + 1j * rng.normal(size=(n, n))
    if reciprocal:
        s = s + s.T
    return largest * s / np.linalg.norm(s, 2)


def loop_array(n: int = 4, resistance_ohm: float = 60.0, coupling: float = 0.05) -> np.ndarray:
    """(n, n) Z of a ring of invented loops: inductive, coupled to neighbours, some resistance shared."""
    at = np.arange(n)
    apart = np.minimum(abs(at[:, None] - at), n - abs(at[:, None] - at))
    z = resistance_ohm * 0.2**apart + 940j * coupling**apart
    return z + np.diag(10j * at)


def lossless_s(seed: int, n: int) -> np.ndarray:
    """(n, n) random reciprocal lossless S: from a real symmetric reactance matrix."""
    rng = np.random.default_rng(seed)
    x = rng.normal(size=(n, n))
    z = 1j * (x + x.T)
    one = np.eye(n)
    return np.linalg.solve(z + one, z - one)
