"""From fields to local matrices: tile by tile, so that memory does not grow with body or channels."""

from __future__ import annotations

import itertools
import os
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numba import get_num_threads

from vop.averaging.geometry import STANDARD, find_cubes
from vop.averaging.samples import COMBINATIONS, read_samples
from vop.checks import checked_metadata
from vop.cubes import CubeGeometry
from vop.errors import InputError
from vop.fields import FieldSource
from vop.grid import Box, RectilinearGrid
from vop.hermitian import packed_entries, round_outward, unpack
from vop.kernels.averaging import LANES, average_entries, signed_corners
from vop.limits import LimitTable, as_fraction_of_limit
from vop.metadata import Domain, Metadata, Reference
from vop.progress import Progress, silent
from vop.regions import Regions, global_matrices_by_region
from vop.sarmodel import SarModel, create_rows, write_model
from vop.storage import create_hdf5, refuse_existing

#: Memory for the fields of a tile, for its tables and for its results, each; sets the size of tiles.
_BYTES = 256 << 20
_LARGEST_TILE, _SMALLEST_TILE = 96, 8


def build_sar_model(
    source: FieldSource,
    average_mass: float | None = 0.010,
    *,
    rule: str = STANDARD,
    combine: str = "outer",
    regions: Regions | None = None,
    exposed: np.ndarray | None = None,
    patient_mass_kg: float | None = None,
    limits: LimitTable | None = None,
    annotate: Callable[[SarModel], Metadata] | None = None,
    path: str | os.PathLike[str] | None = None,
    force: bool = False,
    progress: Progress = silent,
) -> SarModel:
    """Local SAR matrices of a source, averaged over cubes of tissue.

    Q = (1/m) ∫ σ/2 conj(E_i) E_j dV over each cube, m its tissue mass; power and mass are averaged
    apart and then divided. With them come the matrices of whole volumes and of power of
    :func:`vop.regions.global_matrices_by_region`.

    Parameters
    ----------
    average_mass : kg; None for point matrices σ/(2ρ) conj(E_i) E_j.
    rule : averaging rule, see :func:`vop.averaging.geometry.find_cubes`.
    combine : where several samples of a component belong to a cell (nodes, edges): "outer" averages
        their outer products, "field" the complex samples first. By convexity the first is never
        smaller in the semidefinite order, hence the default.
    regions, exposed, patient_mass_kg : for global matrices of the head, of the exposed part, and of a
        body that the grid cuts off; each of the first two costs a second pass over the fields.
    limits : hold each matrix as a fraction of its region's limit (:func:`vop.limits.as_fraction_of_limit`);
        needs ``regions``, and room in memory for all matrices at once.
    annotate : gets the finished model and returns its final metadata; what it raises stops the build.
        By default :func:`vop.checks.checked_metadata`, which refuses fields that break passivity.
    path : write the model there, tile by tile, and return it mapped from disk; else it stays in memory.

    Raises
    ------
    InputError
        Where the field is not finite in tissue, passivity is broken, or an argument is not known.
    OutputError
        Where ``path`` exists and not ``force``, or cannot be written.
    """
    if combine not in COMBINATIONS:
        raise InputError(f"combine {combine!r} is not known; choose one of {', '.join(COMBINATIONS)}")
    if limits is not None and regions is None:
        raise InputError("limits differ by region: state which voxels are head, trunk and extremity")
    if path is not None:
        refuse_existing(path, force)
    cubes = find_cubes(source.grid, source.tissue, average_mass, rule, progress)
    tiles = _tiles(source, cubes)
    cubes = cubes.take(np.concatenate([t.rows for t in tiles]))
    shape = (len(cubes), source.n_channels**2)

    def finish(rows: np.ndarray) -> SarModel:
        absorbed = unpack(_fill(rows, source, tiles, cubes, combine, progress))
        whole = global_matrices_by_region(
            source,
            regions,
            exposed=exposed,
            patient_mass_kg=patient_mass_kg,
            combine=combine,
            absorbed=absorbed,
            progress=progress,
        )
        model = SarModel(
            packed=rows,
            metadata=_metadata(source, cubes, combine).with_details(global_matrices=whole.record),
            cubes=cubes,
            global_matrices={**whole.matrices, "absorbed power": absorbed},
            global_units=whole.units,
        )
        return model.with_metadata(annotate(model) if annotate else checked_metadata(model, source))

    if limits is not None and regions is not None:
        limited = as_fraction_of_limit(finish(np.empty(shape, np.float32)), regions, limits, progress)
        if path is None:
            return limited
        limited.save(path, force)
        return SarModel.load(path, verify=False)
    if path is None:
        return finish(np.empty(shape, np.float32))
    with create_hdf5(path, force) as handle:
        write_model(handle, finish(create_rows(handle, shape)))
    return SarModel.load(path, verify=False)


def absorbed_power(source: FieldSource, combine: str = "outer", progress: Progress = silent) -> np.ndarray:
    """∫ σ/2 conj(E_i) E_j dV over the body: (n, n) complex128, W per |w|²."""
    none = find_cubes(source.grid, source.tissue, None).take(np.zeros(0, np.int64))
    tiles = _tiles(source, none)
    return unpack(_fill(np.empty((0, source.n_channels**2)), source, tiles, none, combine, progress))


def _fill(
    rows: np.ndarray,
    source: FieldSource,
    tiles: list[_Tile],
    cubes: CubeGeometry,
    combine: str,
    progress: Progress,
) -> np.ndarray:
    """Write the matrices tile by tile into ``rows``; returns the packed absorbed power of the body."""
    absorbed = np.zeros(source.n_channels**2)
    at = 0
    for done, tile in enumerate(tiles):
        count = len(tile.rows)
        here = _tile_matrices(source, tile, cubes.take(np.arange(at, at + count)), combine)
        absorbed += here[-1]
        if count:
            rows[at : at + count] = round_outward(here[:-1])
        at += count
        progress("local matrices", done + 1, len(tiles))
    return absorbed


@dataclass(frozen=True, eq=False)
class _Tile:
    core: Box
    around: Box
    rows: np.ndarray


def _cores(grid: RectilinearGrid, size: int) -> list[Box]:
    z, y, x = ([slice(a, min(a + size, s)) for a in range(0, s, size)] for s in grid.shape)
    return list(itertools.product(z, y, x))


def _tile_size(source: FieldSource, cubes: CubeGeometry) -> int:
    """Cells along the core of a tile: as large as the memory for fields, tables and results allows."""
    n = source.n_channels
    steps = min(float(np.diff(e).min()) for e in source.grid.edges_m)
    reach = float((cubes.box_m[:, 1] - cubes.box_m[:, 0]).max(initial=0.0))
    halo = int(np.ceil(reach / steps))
    for size in range(_LARGEST_TILE, _SMALLEST_TILE, -4):
        fields = (size + halo) ** 3 * 24 * n
        tables = (size + halo) ** 3 * 8 * LANES
        if max(fields, tables, size**3 * 8 * n**2) <= _BYTES:
            return size
    return _SMALLEST_TILE


def _tiles(source: FieldSource, cubes: CubeGeometry) -> list[_Tile]:
    grid, size = source.grid, _tile_size(source, cubes)
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


def _tile_matrices(source: FieldSource, tile: _Tile, cubes: CubeGeometry, combine: str) -> np.ndarray:
    """Averaged matrices of a tile's cubes, and the absorbed power of its core as a last row: float64."""
    around = tile.around
    e, offsets, starts = read_samples(source, around, combine)
    # Apart, so that the kernel runs along contiguous numbers of one kind.
    re, im = np.ascontiguousarray(e.real), np.ascontiguousarray(e.imag)
    del e
    weight = 0.5 * source.tissue.conductivity_s_m[around].astype(np.float64) * source.grid.volumes_m3(around)
    ez, ey, ex = (a[s.start : s.stop + 1] for a, s in zip(source.grid.edges_m, around, strict=True))
    z, y, x = (a[[s.start, s.stop]] for a, s in zip(source.grid.edges_m, tile.core, strict=True))
    boxes = np.vstack([cubes.box_m, np.concatenate([x, y, z])])
    scale = np.append(1.0 / cubes.mass_kg, 1.0)
    cell, corner_weight = np.empty((len(boxes), 3, 2), np.int64), np.empty((len(boxes), 3, 4))
    signed_corners(ez, ey, ex, boxes, cell, corner_weight)
    entries = packed_entries(source.n_channels)
    padding = -len(entries[0]) % LANES
    first, second, imaginary = (np.pad(a, (0, padding)) for a in entries)
    shape = (*(s + 1 for s in weight.shape), LANES)
    workers = max(1, min(get_num_threads(), 2 * _BYTES // (8 * int(np.prod(shape)))))
    tables = np.empty((workers, *shape))
    out = np.empty((len(boxes), len(first)))
    average_entries(
        re,
        im,
        offsets,
        starts,
        weight,
        _spans(weight),
        first,
        second,
        imaginary,
        cell,
        corner_weight,
        scale,
        tables,
        out,
    )
    return out[:, : len(entries[0])]


def _spans(weight: np.ndarray) -> np.ndarray:
    """First and one past the last cell of nonzero weight in each row, (nz, ny, 2) int64."""
    filled = weight > 0
    low = filled.argmax(axis=2)
    high = weight.shape[2] - filled[:, :, ::-1].argmax(axis=2)
    return np.stack([low, np.where(filled.any(axis=2), high, low)], axis=-1)


def _metadata(source: FieldSource, cubes: CubeGeometry, combine: str) -> Metadata:
    reference = Reference(source.conventions.reference, z0_ohm=source.z0_ohm)
    if reference.unit in ("V", "A"):
        # Fields were converted to peak per unit of w as the export wrote it: w stays what it was there.
        reference = replace(reference, phasor=source.conventions.phasor)
    meta = Metadata(
        reference=reference,
        channel_names=source.channel_names,
        domain=Domain(frequency_hz=float(source.frequency_hz)),
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
