"""Largest value of packed matrices along packed functionals, in float64 and fixed order."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True, error_model="numpy")
def maxima(rows, functionals, best, where, offset):
    """Raise ``best`` (M,) to max_r rows[r] @ functionals[m], and note offset + r in ``where`` (M,).

    rows : (R, n²) float32; functionals : (M, n²) float64. Ties keep the earliest row.
    """
    width = rows.shape[1]
    count = functionals.shape[0]
    across = np.ascontiguousarray(functionals.T)
    values = np.empty(count)
    for r in range(rows.shape[0]):
        for m in range(count):
            values[m] = 0.0
        for p in range(width):
            c = np.float64(rows[r, p])
            line = across[p]
            for m in range(count):
                values[m] += c * line[m]
        for m in range(count):
            if values[m] > best[m]:
                best[m] = values[m]
                where[m] = offset + r
