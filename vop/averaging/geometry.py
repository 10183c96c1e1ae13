"""Find the averaging cubes of a body: IEC/IEEE 62704-1, or simpler rules, as :class:`CubeGeometry`."""

from __future__ import annotations

import numpy as np

from vop.cubes import CubeGeometry, CubeKind, VoxelStatus
from vop.errors import InputError
from vop.fields import Tissue
from vop.grid import RectilinearGrid
from vop.kernels.averaging import box_integrals, cumulate
from vop.kernels.cube_search import centred_cubes, face_cubes, mark_used
from vop.progress import Progress, silent

STANDARD = "iec-62704-1"
CENTRED_ONLY = "centred-only"
POINTS = "points"
RULES = (STANDARD, CENTRED_ONLY)

#: Voxels per step of a search; only progress depends on it.
_STEP = 1 << 16


def find_cubes(
    grid: RectilinearGrid,
    tissue: Tissue,
    average_mass_kg: float | None,
    rule: str = STANDARD,
    progress: Progress = silent,
) -> CubeGeometry:
    """Averaging cubes of all tissue voxels.

    Parameters
    ----------
    average_mass_kg : mass of each cube, or None for one point matrix per voxel.
    rule : "iec-62704-1" (valid centred cubes, and face-anchored cubes of unused voxels), or
        "centred-only" (the centred cube of every voxel, valid or not).

    Raises
    ------
    InputError
        Where the mass is not positive or the rule is not known.
    """
    body = tissue.body
    voxels = np.argwhere(body)
    flat: np.ndarray = np.flatnonzero(body)
    if average_mass_kg is None:
        return _points(grid, tissue, voxels, flat)
    if not (np.isfinite(average_mass_kg) and average_mass_kg > 0):
        raise InputError(f"average mass {average_mass_kg} kg: it must be positive, 0.010 for 10 g")
    if rule not in RULES:
        raise InputError(f"averaging rule {rule!r} is not known; choose one of {', '.join(RULES)}")
    ez, ey, ex = grid.edges_m
    volumes = grid.volumes_m3()
    rho = tissue.density_kg_m3.astype(np.float64)
    table = summed_volumes(rho * volumes, np.where(body, volumes, 0.0))
    longest = 2.0 * max(float(e[-1] - e[0]) for e in (ez, ey, ex))
    boxes = np.zeros((len(voxels), 6))
    state = np.zeros(len(voxels), np.uint8)
    for a in range(0, len(voxels), _STEP):
        part = slice(a, a + _STEP)
        centred_cubes(
            table,
            body,
            rho,
            ez,
            ey,
            ex,
            voxels[part],
            float(average_mass_kg),
            longest,
            boxes[part],
            state[part],
        )
        progress("centred cubes", min(a + _STEP, len(voxels)), len(voxels))
    notes = list(_notes(body))
    if rule == CENTRED_ONLY:
        keep = state != VoxelStatus.UNSERVED
        kind = np.where(keep, CubeKind.CENTRED, CubeKind.POINT).astype(np.uint8)
        served, out_boxes = flat, boxes
        status_of = np.where(keep, VoxelStatus.VALID, VoxelStatus.UNSERVED)
        notes.append("every voxel has its centred cube, valid or not; surfaces are underestimated")
    else:
        count = np.zeros(tuple(s + 1 for s in grid.shape), np.int32)
        mark_used(boxes, state, ez, ey, ex, count)
        used = count[tuple(voxels.T)] > 0
        valid, lost = state == VoxelStatus.VALID, state == VoxelStatus.UNSERVED
        unused = ~valid & ~used & ~lost
        status_of = np.where(
            valid,
            VoxelStatus.VALID,
            np.where(used, VoxelStatus.USED, np.where(lost, VoxelStatus.UNSERVED, VoxelStatus.UNUSED)),
        )
        surface = voxels[unused]
        face_boxes = np.zeros((len(surface), 6, 6))
        chosen = np.zeros((len(surface), 6), bool)
        for a in range(0, len(surface), _STEP):
            part = slice(a, a + _STEP)
            face_cubes(
                table,
                rho,
                ez,
                ey,
                ex,
                surface[part],
                float(average_mass_kg),
                longest,
                face_boxes[part],
                chosen[part],
            )
            progress("face-anchored cubes", min(a + _STEP, len(surface)), len(surface))
        which, face = np.nonzero(chosen)
        points = np.flatnonzero(lost & ~used)
        boxes[points] = _cells(grid, voxels[points])
        served = np.concatenate([flat[valid], flat[unused][which], flat[points]])
        kind = np.concatenate(
            [
                np.full(valid.sum(), CubeKind.CENTRED),
                CubeKind.FACE_X_LOW + face,
                np.full(len(points), CubeKind.POINT),
            ]
        ).astype(np.uint8)
        out_boxes = np.concatenate([boxes[valid], face_boxes[which, face], boxes[points]])
        order = np.argsort(served, kind="stable")
        served, kind, out_boxes = served[order], kind[order], out_boxes[order]
    lost_count = int((state == VoxelStatus.UNSERVED).sum())
    if lost_count:
        boxes_of_lost = kind == CubeKind.POINT
        out_boxes[boxes_of_lost] = _cells(
            grid, np.stack(np.unravel_index(served[boxes_of_lost], grid.shape), -1)
        )
        notes.append(
            f"WARNING: the body holds less than {average_mass_kg:g} kg around {lost_count} voxels; "
            "they keep their point SAR, the largest of which no average over them exceeds"
        )
    status = np.zeros(grid.shape, np.uint8)
    status[tuple(voxels.T)] = status_of
    masses = np.empty(len(out_boxes))
    box_integrals(table[..., 0], ez, ey, ex, out_boxes, masses)
    return CubeGeometry(
        grid=grid,
        status=status,
        voxel=served,
        kind=kind,
        box_m=out_boxes,
        mass_kg=masses,
        average_mass_kg=float(average_mass_kg),
        rule=rule,
        notes=tuple(notes),
    )


def summed_volumes(*cells: np.ndarray) -> np.ndarray:
    """Summed volumes (nz+1, ny+1, nx+1, M), float64, of M integrals over cells (nz, ny, nx)."""
    table = np.zeros((*(s + 1 for s in cells[0].shape), len(cells)))
    for m, integrals in enumerate(cells):
        table[1:, 1:, 1:, m] = integrals
        cumulate(table[..., m])
    return table


def _cells(grid: RectilinearGrid, voxels: np.ndarray) -> np.ndarray:
    ez, ey, ex = grid.edges_m
    k, j, i = voxels.T
    return np.stack([ex[i], ex[i + 1], ey[j], ey[j + 1], ez[k], ez[k + 1]], axis=-1)


def _points(grid: RectilinearGrid, tissue: Tissue, voxels: np.ndarray, flat: np.ndarray) -> CubeGeometry:
    index = tuple(voxels.T)
    return CubeGeometry(
        grid=grid,
        status=np.where(tissue.body, VoxelStatus.VALID, VoxelStatus.BACKGROUND).astype(np.uint8),
        voxel=flat,
        kind=np.full(len(flat), CubeKind.POINT, np.uint8),
        box_m=_cells(grid, voxels),
        mass_kg=(tissue.density_kg_m3[index] * grid.volumes_m3()[index]).astype(np.float64),
        average_mass_kg=None,
        rule=POINTS,
        notes=("point SAR, not averaged; no limit is stated on it",),
    )


def _notes(body: np.ndarray) -> list[str]:
    notes = []
    for axis, name in enumerate("zyx"):
        for index, side in ((0, "low"), (-1, "high")):
            touching = int(np.take(body, index, axis=axis).sum())
            if touching:
                notes.append(
                    f"WARNING: the body reaches the {side} end of the grid along {name} ({touching} "
                    "voxels); beyond it counts as background, though the body may go on there"
                )
    return notes
