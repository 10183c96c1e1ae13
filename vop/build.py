"""From fields to local matrices: tile by tile, so that memory does not grow with body or channels."""

from __future__ import annotations

import os
from collections.abc import Callable
from dataclasses import replace

import numpy as np

from vop.averaging.apply import average_tile, tiles_for
from vop.averaging.geometry import STANDARD, find_cubes
from vop.averaging.samples import COMBINATIONS
from vop.averaging.scratch import Scratch
from vop.averaging.tiles import Tile
from vop.checks import checked_metadata
from vop.cubes import CubeGeometry
from vop.errors import InputError
from vop.fields import FieldSource
from vop.hermitian import round_outward, unpack
from vop.limits import LimitTable, as_fraction_of_limit
from vop.metadata import Domain, Metadata, Reference
from vop.progress import Progress, silent
from vop.regions import Regions, global_matrices_by_region
from vop.sarmodel import SarModel, create_rows, write_model
from vop.storage import create_hdf5, refuse_existing

#: Matrix entries that are rounded at a time; only memory depends on it.
_ROUNDED = 1 << 22


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
    tiles = tiles_for(source, cubes, combine)
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
    tiles = tiles_for(source, none, combine)
    return unpack(_fill(np.empty((0, source.n_channels**2)), source, tiles, none, combine, progress))


def _fill(
    rows: np.ndarray,
    source: FieldSource,
    tiles: list[Tile],
    cubes: CubeGeometry,
    combine: str,
    progress: Progress,
) -> np.ndarray:
    """Write the matrices tile by tile into ``rows``; returns the packed absorbed power of the body."""
    absorbed = np.zeros(source.n_channels**2)
    scratch, at = Scratch(), 0
    step = _ROUNDED // rows.shape[1] + 1
    for done, tile in enumerate(tiles):
        count = len(tile.rows)
        mine = cubes.take(np.arange(at, at + count))
        averages, power, lanes = average_tile(source, tile, mine, combine, scratch)
        absorbed += power[lanes]
        for a in range(0, count, step):
            part = averages[a : a + step]
            rows[at + a : at + a + len(part)] = round_outward(part, lanes)
        at += count
        progress("local matrices", done + 1, len(tiles))
    return absorbed


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
