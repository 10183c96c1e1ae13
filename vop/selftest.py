"""Self-test vectors: excitations with the SAR that a right consumer of a set must get."""

from __future__ import annotations

import numpy as np

from vop.vopset import VopSet


def self_test_vectors(vop_set: VopSet) -> tuple[np.ndarray, np.ndarray]:
    """Excitations and their max_k wᴴA_kw.

    The first n drive one channel each (order of channels, a scale of √2 or 2); then come uniform
    amplitude with growing phase steps, forwards and backwards (a lost conjugate exchanges the two),
    and unequal amplitudes with a quadratic phase.

    Returns
    -------
    w : (m, n) complex128, in the unit of the set's reference.
    sar : (m,) float64, W/kg.
    """
    n = vop_set.n_channels
    channel = np.arange(n)
    step = 2 * np.pi / max(n, 2)
    rows = [*np.eye(n, dtype=np.complex128)]
    for mode in (1, -1, 2, -2):
        rows.append(np.exp(1j * step * mode * channel))
    rows.append((1 + channel) / n * np.exp(0.7j * channel**2))
    rows.append((1 + channel) / n * np.exp(-0.7j * channel**2))
    w = np.array(rows)
    sar = np.einsum("mi,kij,mj->mk", w.conj(), vop_set.matrices, w, optimize=True).real.max(axis=1)
    return w, sar
