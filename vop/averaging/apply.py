"""Read densities over boxes."""

from __future__ import annotations

import numpy as np

from vop.grid import RectilinearGrid
from vop.kernels.averaging import boxes_from_tables


def box_integrals(table: np.ndarray, grid: RectilinearGrid, boxes_m: np.ndarray) -> np.ndarray:
    """Integrals (R,), float64, of one summed volume over boxes (R, 6) in metres."""
    out = np.empty((len(boxes_m), 1))
    boxes_from_tables(table[None], *grid.edges_m, np.ascontiguousarray(boxes_m), np.ones(len(boxes_m)), out)
    return out[:, 0]
