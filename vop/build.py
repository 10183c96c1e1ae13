"""From fields to local matrices: tile by tile, so that memory does not grow with body or channels."""

from __future__ import annotations

import itertools
import os
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from vop.averaging.geometry import STANDARD, find_cubes
from vop.cubes import CubeGeometry
from vop.errors import InputError
from vop.fields import SAMPLES, FieldSource
from vop.grid import Box, RectilinearGrid
from vop.hermitian import packed_entries, round_outward, unpack
from vop.kernels.averaging import boxes_from_tables, power_table
from vop.metadata import Domain, Metadata, Reference
from vop.progress import Progress, silent
from vop.sarmodel import SarModel

COMBINATIONS = ("outer", "field")
#: Matrix entries whose summed volumes are held at a time.
_BLOCK = 64
#: Float64 numbers that the results of one tile may take; sets the size of tiles.
_TILE_NUMBERS = 1 << 24
_LARGEST_TILE = 48


def build_sar_model(
    source: FieldSource,
    average_mass: float | None = 0.010,
    *,
    rule: str = STANDARD,
    combine: str = "outer",
    domain: Domain | None = None,
    path: str | os.PathLike[str] | None = None,
    force: bool = False,
    progress: Progress = silent,
) -> SarModel:
    """Local SAR matrices of a source, averaged over cubes of tissue.

    Q = (1/m) ∫ σ/2 conj(E_i) E_j dV over each cube, m its tissue mass; power and mass are averaged
    apart and then divided. The absorbed-power matrix ∫ σ/2 conj(E_i) E_j dV over the body comes with it.

    Parameters
    ----------
    average_mass : kg; None for point matrices σ/(2ρ) conj(E_i) E_j.
    rule : averaging rule, see :func:`vop.averaging.geometry.find_cubes`.
    combine : where several samples of a component belong to a cell (nodes, edges): "outer" averages
        their outer products, "field" the complex samples first. By convexity the first is never
        smaller in the semidefinite order, hence the default.
    domain : domain of use to record.
    path : write the model there and return it mapped from disk; else it stays in memory.

    Raises
    ------
    InputError
        Where the field is not finite in tissue, or an argument is not known.
    OutputError
        Where ``path`` exists and not ``force``, or cannot be written.
    """
    if combine not in COMBINATIONS:
        raise InputError(f"combine {combine!r} is not known; choose one of {', '.join(COMBINATIONS)}")
    cubes = find_cubes(source.grid, source.tissue, average_mass, rule, progress)
    tiles = _tiles(source, cubes)
    cubes = cubes.take(np.concatenate([t.rows for t in tiles]))
    n = source.n_channels
    rows = np.empty((len(cubes), n * n), np.float32)
    absorbed = np.zeros(n * n)
    at = 0
    for done, tile in enumerate(tiles):
        count = len(tile.rows)
        here = _tile_matrices(source, tile, cubes.take(np.arange(at, at + count)), combine, absorbed)
        rows[at : at + count] = round_outward(here)
        at += count
        progress("local matrices", done + 1, len(tiles))
    model = SarModel(
        packed=rows,
        metadata=_metadata(source, cubes, combine, domain),
        cubes=cubes,
        global_matrices={"absorbed power": unpack(absorbed)},
        global_units={"absorbed power": "W per |w|^2"},
    )
    if path is None:
        return model
    model.save(path, force)
    return SarModel.load(path, verify=False)


def absorbed_power(source: FieldSource, combine: str = "outer", progress: Progress = silent) -> np.ndarray:
    """∫ σ/2 conj(E_i) E_j dV over the body: (n, n) complex128, W per |w|²."""
    n = source.n_channels
    total = np.zeros(n * n)
    tiles = _cores(source.grid, _LARGEST_TILE)
    for done, core in enumerate(tiles):
        if source.tissue.body[core].any():
            for _ in _tables(source, core, core, combine, total):
                pass
        progress("absorbed power", done + 1, len(tiles))
    return unpack(total)


@dataclass(frozen=True, eq=False)
class _Tile:
    core: Box
    around: Box
    rows: np.ndarray


def _cores(grid: RectilinearGrid, size: int) -> list[Box]:
    z, y, x = ([slice(a, min(a + size, s)) for a in range(0, s, size)] for s in grid.shape)
    return list(itertools.product(z, y, x))


def _tiles(source: FieldSource, cubes: CubeGeometry) -> list[_Tile]:
    grid, n = source.grid, source.n_channels
    size = int(min(_LARGEST_TILE, max(8, (_TILE_NUMBERS / n**2) ** (1 / 3))))
    counts = [-(-s // size) for s in grid.shape]
    k, j, i = np.unravel_index(cubes.voxel, grid.shape)
    tile_of = (k // size * counts[1] + j // size) * counts[2] + i // size
    order = np.argsort(tile_of, kind="stable")
    ends = np.searchsorted(tile_of[order], np.arange(np.prod(counts) + 1))
    tiles = []
    for number, core in enumerate(_cores(grid, size)):
        rows = order[ends[number] : ends[number + 1]]
        if rows.size == 0 and not source.tissue.body[core].any():
            continue
        tiles.append(_Tile(core, _surrounding(grid, core, cubes.box_m[rows]), rows))
    return tiles


def _surrounding(grid: RectilinearGrid, core: Box, boxes: np.ndarray) -> Box:
    """Cells that the core and all boxes touch."""
    out = []
    for axis, (edges, part) in enumerate(zip(grid.edges_m, core, strict=True)):
        low, high = part.start, part.stop
        if len(boxes):
            column = 2 * (2 - axis)
            low = min(low, int(np.searchsorted(edges, boxes[:, column].min(), "right")) - 1)
            high = max(high, int(np.searchsorted(edges, boxes[:, column + 1].max(), "left")))
        out.append(slice(max(low, 0), min(high, len(edges) - 1)))
    return tuple(out)  # type: ignore[return-value]


def _tile_matrices(
    source: FieldSource, tile: _Tile, cubes: CubeGeometry, combine: str, absorbed: np.ndarray
) -> np.ndarray:
    out = np.empty((len(cubes), source.n_channels**2))
    ez, ey, ex = (e[s.start : s.stop + 1] for e, s in zip(source.grid.edges_m, tile.around, strict=True))
    boxes, scale = np.ascontiguousarray(cubes.box_m), 1.0 / cubes.mass_kg
    for part, table in _tables(source, tile.around, tile.core, combine, absorbed):
        block = np.empty((len(cubes), table.shape[0]))
        boxes_from_tables(table, ez, ey, ex, boxes, scale, block)
        out[:, part] = block
    return out


def _tables(
    source: FieldSource, around: Box, core: Box, combine: str, absorbed: np.ndarray
) -> Iterator[tuple[slice, np.ndarray]]:
    """Summed volumes of absorbed power, a block of entries at a time; adds the core's to ``absorbed``."""
    e = _read(source, around)
    samples = SAMPLES[source.centring]
    if combine == "field" and source.centring != "cell":
        e, samples = _mean_samples(e, samples), SAMPLES["cell"]
    offsets = np.array([o for component in samples for o in component], dtype=np.int64)
    starts = np.cumsum([0, *(len(component) for component in samples)])
    weight = 0.5 * source.tissue.conductivity_s_m[around].astype(np.float64) * source.grid.volumes_m3(around)
    weight[~source.tissue.body[around]] = 0.0
    first, second, imaginary = packed_entries(source.n_channels)
    inner = [slice(c.start - a.start, c.stop - a.start) for c, a in zip(core, around, strict=True)]
    z0, z1, y0, y1, x0, x1 = (f(s) for s in inner for f in (lambda s: s.start, lambda s: s.stop))
    for b in range(0, len(first), _BLOCK):
        part = slice(b, b + _BLOCK)
        table = np.empty((len(first[part]), *(s + 1 for s in weight.shape)))
        power_table(e, offsets, starts, weight, first[part], second[part], imaginary[part], table)
        t = table[:, (z0, z1)][:, :, (y0, y1)][:, :, :, (x0, x1)]
        d = t[:, 1] - t[:, 0]
        absorbed[part] += d[:, 1, 1] - d[:, 1, 0] - d[:, 0, 1] + d[:, 0, 0]
        yield part, table


def _read(source: FieldSource, around: Box) -> np.ndarray:
    body = source.tissue.body[around]
    touched = body
    if source.centring != "cell":
        # A sample matters if any cell that uses it is tissue.
        padded = np.pad(body, ((0, 1),) * 3)
        touched = np.zeros_like(padded)
        for k in (0, 1):
            for j in (0, 1):
                for i in (0, 1):
                    touched |= np.roll(padded, (k, j, i), (0, 1, 2))
    out = []
    for channel in range(source.n_channels):
        e = source.electric(channel, around)
        bad = ~np.isfinite(e).all(axis=0) & touched
        if bad.any():
            at = [int(v) + s.start for v, s in zip(np.argwhere(bad)[0], around, strict=True)]
            raise InputError(
                f"field of channel {source.channel_names[channel]} is NaN or infinite at {int(bad.sum())} "
                f"samples in tissue, the first at [z, y, x] = {at}; repair the export, or crop it away"
            )
        e[:, ~touched] = 0
        out.append(e)
    return np.array(out)


def _mean_samples(e: np.ndarray, samples: tuple[tuple[tuple[int, int, int], ...], ...]) -> np.ndarray:
    nz, ny, nx = (s - 1 for s in e.shape[2:])
    out = np.zeros((e.shape[0], 3, nz, ny, nx), np.complex128)
    for component, offsets in enumerate(samples):
        for k, j, i in offsets:
            out[:, component] += e[:, component, k : k + nz, j : j + ny, i : i + nx]
        out[:, component] /= len(offsets)
    return out.astype(np.complex64)


def _metadata(source: FieldSource, cubes: CubeGeometry, combine: str, domain: Domain | None) -> Metadata:
    quantity = source.conventions.reference
    meta = Metadata(
        reference=Reference(quantity, z0_ohm=source.z0_ohm),
        channel_names=source.channel_names,
        domain=domain or Domain(frequency_hz=float(source.frequency_hz)),
        details={
            "source": source.describe(),
            "averaging": {
                "rule": cubes.rule,
                "average_mass_kg": cubes.average_mass_kg,
                "combine": combine,
                "counts": cubes.counts(),
                "notes": list(cubes.notes),
            },
        },
    )
    return meta.with_warnings(*(n.removeprefix("WARNING: ") for n in cubes.notes if n.startswith("WARNING")))
