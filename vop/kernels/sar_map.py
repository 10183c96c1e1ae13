"""Spread the SAR of valid cubes over the used voxels inside them."""

from __future__ import annotations

from numba import njit

from vop.kernels.cube_search import wholly_inside


@njit(cache=True, nogil=True)
def spread_over_used(boxes, sar, used, ez, ey, ex, out):
    """out = max(out, SAR of each cube) at the used voxels wholly inside it; (z, y, x) arrays."""
    for r in range(boxes.shape[0]):
        z0, z1, y0, y1, x0, x1 = wholly_inside(ez, ey, ex, boxes[r])
        for k in range(z0, z1 + 1):
            for j in range(y0, y1 + 1):
                for i in range(x0, x1 + 1):
                    if used[k, j, i] and sar[r] > out[k, j, i]:
                        out[k, j, i] = sar[r]
