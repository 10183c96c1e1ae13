"""Clustering as published, written plainly with batched numpy.linalg: the yardstick for time and sets.

Eichfelder & Gebhardt, Magn Reson Med 2011;66:1468-1476.
"""

from __future__ import annotations

import numpy as np


def cluster_plainly(
    matrices: np.ndarray, bound: float, patience: int = 1, most: int | None = None
) -> tuple[np.ndarray, np.ndarray]:
    """Cores and B + Z of all clusters.

    Parameters
    ----------
    matrices : (N, n, n) complex, Hermitian positive semidefinite.
    bound : largest λmax(Z) allowed, in the unit of the matrices.
    patience : so many refusals without growth between them close a cluster; published: 1.
    most : stop after so many clusters (to measure the time of a part).

    Returns
    -------
    (core_index, delivered) : (K,) int64 and (K, n, n) complex128.
    """
    n = matrices.shape[-1]
    largest = np.linalg.eigvalsh(matrices)[:, -1]
    left = np.argsort(-largest, kind="stable")
    cores, delivered = [], []
    while len(left) and (most is None or len(cores) < most):
        core = matrices[left[0]]
        least = np.linalg.eigvalsh(core - matrices[left])[:, 0]
        taken = np.zeros(len(left), dtype=bool)
        taken[0] = True
        z = np.zeros((n, n), dtype=complex)
        refusals = 0
        for k in np.lexsort((left, -least)):
            if least[k] < -bound or refusals == patience:
                break
            values, vectors = np.linalg.eigh(matrices[left[k]] - core - z)
            grown = z + (vectors * values.clip(min=0)) @ vectors.conj().T
            if values[-1] <= 0 or np.linalg.eigvalsh(grown)[-1] <= bound:
                taken[k] = True
                if values[-1] > 0:
                    z, refusals = grown, 0
            else:
                refusals += 1
        cores.append(left[0])
        delivered.append(core + z)
        left = left[~taken]
    return np.array(cores, dtype=np.int64), np.array(delivered)
