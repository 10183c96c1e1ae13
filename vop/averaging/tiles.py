"""Parts of a body that fit into memory with everything their cubes reach.

The tree of halves depends on geometry and channel count alone, never on memory or threads found, so that
the same input always gives the same matrices.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from vop.cubes import CubeGeometry
from vop.fields import Tissue
from vop.grid import Box, RectilinearGrid

#: Memory, bytes, for the fields of a tile, for one summed-volume window, and for averaged matrices.
FIELD_BYTES, WINDOW_BYTES, RESULT_BYTES = 256 << 20, 12 << 20, 640 << 20


@dataclass(frozen=True, eq=False)
class Tile:
    """core : cells whose power this tile adds up. around : cells that the core and its boxes touch.
    rows : (R,) int64, cubes whose voxel lies in the core, in ascending order of their number."""

    core: Box
    around: Box
    rows: np.ndarray


def make_tiles(
    tissue: Tissue, cubes: CubeGeometry, field_bytes_per_cell: int, result_bytes_per_cube: int
) -> list[Tile]:
    """Tiles whose cores hold each tissue voxel once, in a fixed order.

    A tile is halved until fields, window and results each fit, or it is one cell: across its longest side,
    that along y counting double, because the window of a sweep along z is best kept in the cache.
    """
    whole = _bounding_box(tissue.body)
    at = np.stack(np.unravel_index(cubes.voxel, cubes.grid.shape), axis=-1)
    everything = np.arange(len(cubes))
    return list(
        _split(tissue.body, cubes, at, whole, everything, field_bytes_per_cell, result_bytes_per_cube)
    )


def _split(
    body: np.ndarray,
    cubes: CubeGeometry,
    at: np.ndarray,
    core: Box,
    rows: np.ndarray,
    field: int,
    result: int,
) -> Iterator[Tile]:
    if rows.size == 0 and not body[core].any():
        return
    boxes = cubes.box_m[rows]
    around = _surrounding(cubes.grid, core, boxes)
    nz, ny, nx = (s.stop - s.start for s in around)
    lengths = [s.stop - s.start for s in core]
    # What a core of one cell would still reach for; where that is most of it, halving saves nothing.
    hz, hy, hx = (n - c + 1 for n, c in zip((nz, ny, nx), lengths, strict=True))
    window = (_tallest(cubes.grid, boxes) + 2) * (ny + 1) * (nx + 1) * 64
    if max(lengths) == 1 or (
        rows.size * result <= RESULT_BYTES
        and (nz * ny * nx * field <= FIELD_BYTES or 2 * hz * hy * hx > nz * ny * nx)
        and (window <= WINDOW_BYTES or 2 * hy > ny)
    ):
        yield Tile(core, around, rows)
        return
    axis = int(np.argmax([lengths[0], 2 * lengths[1], lengths[2]]))
    middle = core[axis].start + lengths[axis] // 2
    low = at[rows, axis] < middle
    for part, chosen in ((slice(core[axis].start, middle), low), (slice(middle, core[axis].stop), ~low)):
        z, y, x = (part if a == axis else whole for a, whole in enumerate(core))
        yield from _split(body, cubes, at, (z, y, x), rows[chosen], field, result)


def _bounding_box(body: np.ndarray) -> Box:
    out = []
    for axis in range(3):
        filled = np.flatnonzero(body.any(axis=tuple(a for a in range(3) if a != axis)))
        out.append(slice(int(filled[0]), int(filled[-1]) + 1))
    return tuple(out)  # type: ignore[return-value]


def _surrounding(grid: RectilinearGrid, core: Box, boxes: np.ndarray) -> Box:
    out = []
    for axis, (edges, part) in enumerate(zip(grid.edges_m, core, strict=True)):
        low, high = part.start, part.stop
        if len(boxes):
            column = 2 * (2 - axis)
            low = min(low, int(np.searchsorted(edges, boxes[:, column].min(), "right")) - 1)
            high = max(high, int(np.searchsorted(edges, boxes[:, column + 1].max(), "left")))
        out.append(slice(max(low, 0), min(high, len(edges) - 1)))
    return tuple(out)  # type: ignore[return-value]


def _tallest(grid: RectilinearGrid, boxes: np.ndarray) -> int:
    """Cells along z that the tallest box touches, at most."""
    low = np.searchsorted(grid.z_edges_m, boxes[:, 4], "right")
    high = np.searchsorted(grid.z_edges_m, boxes[:, 5], "left")
    return int((high - low + 1).max(initial=0))
