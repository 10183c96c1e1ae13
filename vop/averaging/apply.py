"""Average the matrix entries of a tile over its cubes."""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from numba import get_num_threads

from vop.averaging.samples import pack_samples, packed_bytes_per_cell
from vop.averaging.scratch import Scratch
from vop.averaging.tiles import Tile, make_tiles
from vop.cubes import CubeGeometry
from vop.fields import FieldSource
from vop.hermitian import packed_entries
from vop.kernels.averaging import signed_corners
from vop.kernels.averaging_blocks import average_blocks
from vop.kernels.averaging_vectors import LANES, STRETCH

#: Memory, bytes, for the windows of all workers, if that holds one.
_WINDOWS_BYTES = 256 << 20


@dataclass(frozen=True, eq=False)
class Blocks:
    """How the n² entries are dealt out to blocks of :mod:`vop.kernels.averaging_blocks`.

    pairs : (B, 2) int64, pairs of channels. pattern : (B,) int64.
    lanes : (n²,) int64, where the packed entries are among the B·LANES lanes.
    """

    pairs: np.ndarray
    pattern: np.ndarray
    lanes: np.ndarray

    @classmethod
    def of(cls, n: int) -> Blocks:
        """Blocks for n channels."""
        count = (n + 1) // 2
        crossed = list(itertools.combinations(range(count), 2))
        own = [(p, min(p + 1, count - 1)) for p in range(0, count, 2)]
        lane_of: dict[tuple[int, int, bool], int] = {}
        for block, (p, q) in enumerate(crossed):
            for m, (i, j) in enumerate(itertools.product((2 * p, 2 * p + 1), (2 * q, 2 * q + 1))):
                for imaginary in (False, True):
                    lane_of[i, j, imaginary] = LANES * block + 2 * m + imaginary
        for block, both in enumerate(own, len(crossed)):
            for half, p in enumerate(both):
                entries = [
                    (2 * p, 2 * p, False),
                    (2 * p + 1, 2 * p + 1, False),
                    (2 * p, 2 * p + 1, False),
                    (2 * p, 2 * p + 1, True),
                ]
                for m, entry in enumerate(entries):
                    lane_of[entry] = LANES * block + 4 * half + m
        lanes = [lane_of[int(i), int(j), bool(imag)] for i, j, imag in zip(*packed_entries(n), strict=True)]
        return cls(
            np.array(crossed + own, np.int64).reshape(-1, 2),
            np.array([0] * len(crossed) + [1] * len(own), np.int64),
            np.array(lanes, np.int64),
        )


def tiles_for(source: FieldSource, cubes: CubeGeometry, combine: str) -> list[Tile]:
    """Tiles of the size that :func:`average_tile` can hold."""
    blocks = Blocks.of(source.n_channels)
    return make_tiles(
        source.tissue, cubes, packed_bytes_per_cell(source, combine), 8 * LANES * len(blocks.pairs)
    )


def average_tile(
    source: FieldSource, tile: Tile, cubes: CubeGeometry, combine: str, scratch: Scratch
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Averages over a tile's cubes and the absorbed power of its core.

    Parameters
    ----------
    cubes : those of the tile alone. scratch : where the averages stay until the next tile.

    Returns
    -------
    averages : (R, L) float64, W/kg per |w|²; power : (L,) float64, W per |w|²; lanes : (n²,) int64, so
        that ``averages[:, lanes]`` are packed matrices.
    """
    around, grid = tile.around, source.grid
    samples = pack_samples(source, around, combine, scratch)
    volumes = grid.volumes_m3(around)
    nz, ny, nx = volumes.shape
    weight = np.zeros((nz, ny, samples.e.shape[3] * STRETCH))
    weight[:, :, :nx] = source.tissue.conductivity_s_m[around]
    weight[:, :, :nx] *= 0.5 / samples.per_component * volumes
    ez, ey, ex = (a[s.start : s.stop + 1] for a, s in zip(grid.edges_m, around, strict=True))
    nodes = scratch.array("nodes", (len(cubes), 3, 4), np.int64)
    corners = scratch.array("corners", (len(cubes), 12))
    signed_corners(ez, ey, ex, cubes.box_m, nodes, corners)
    top = nodes[:, 0].max(axis=1, initial=0)
    order = np.argsort(top, kind="stable")
    ends = np.searchsorted(top[order], np.arange(nz + 2))
    height = max(2, int((top - nodes[:, 0].min(axis=1, initial=nz)).max(initial=0)) + 1)
    core = np.array(
        [[c.start - a.start, c.stop - a.start] for c, a in zip(tile.core, around, strict=True)], np.int64
    )
    blocks = Blocks.of(source.n_channels)
    plane = LANES * (ny + 1) * (nx + 1)
    workers = max(1, min(get_num_threads(), len(blocks.pairs), _WINDOWS_BYTES // (8 * height * plane)))
    averages = scratch.array("averages", (len(cubes), len(blocks.pairs), LANES))
    power = np.zeros((len(blocks.pairs), LANES))
    average_blocks(
        samples.e,
        samples.terms,
        weight,
        _spans(weight),
        blocks.pairs,
        blocks.pattern,
        order,
        ends,
        nodes,
        corners,
        1.0 / cubes.mass_kg,
        core,
        scratch.array("windows", (workers, height, plane)),
        averages,
        power,
    )
    return averages.reshape(len(cubes), LANES * len(blocks.pairs)), power.reshape(-1), blocks.lanes


def _spans(weight: np.ndarray) -> np.ndarray:
    """First and one past the last cell of nonzero weight in each row, (nz, ny, 2) int64."""
    filled = weight > 0
    low = filled.argmax(axis=2)
    high = weight.shape[2] - filled[:, :, ::-1].argmax(axis=2)
    return np.stack([low, np.where(filled.any(axis=2), high, low)], axis=-1)
