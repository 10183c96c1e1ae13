"""Find the averaging cubes of a body: IEC/IEEE 62704-1, or simpler rules, as :class:`CubeGeometry`."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from vop.cubes import CubeGeometry, CubeKind, VoxelStatus
from vop.errors import InputError
from vop.fields import Tissue
from vop.grid import RectilinearGrid
from vop.kernels.averaging import box_integrals, cumulate
from vop.kernels.cube_search import centred_cubes, face_cubes, mark_used
from vop.kernels.cube_sides import MASS_TIE
from vop.progress import Progress, silent

STANDARD = "iec-62704-1"
CENTRED_ONLY = "centred-only"
POINTS = "points"
RULES = (STANDARD, CENTRED_ONLY)

_CENTRED_ONLY_NOTES = ("every voxel has its centred cube, valid or not; surfaces are underestimated",)

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
    voxels = np.ascontiguousarray(np.argwhere(body))
    flat: np.ndarray = np.flatnonzero(body)
    if average_mass_kg is None:
        return _points(grid, tissue, voxels, flat)
    wanted = float(average_mass_kg)
    if not (np.isfinite(wanted) and wanted > 0):
        raise InputError(f"average mass {average_mass_kg} kg: it must be positive, 0.010 for 10 g")
    if rule not in RULES:
        raise InputError(f"averaging rule {rule!r} is not known; choose one of {', '.join(RULES)}")
    search = _Search.of(grid, tissue, wanted)
    boxes, state = search.centred(voxels, progress)
    kind_of: np.ndarray = np.full(len(voxels), CubeKind.CENTRED, np.uint8)
    status_of = state.copy()
    if rule == CENTRED_ONLY:
        status_of[state == VoxelStatus.UNUSED] = VoxelStatus.VALID
        served, kind = np.arange(len(voxels)), kind_of
    else:
        held = search.held(boxes, state)[tuple(voxels.T)]
        status_of[held & (state != VoxelStatus.VALID)] = VoxelStatus.USED
        unused = np.flatnonzero(status_of == VoxelStatus.UNUSED)
        face_boxes, chosen = search.faces(voxels[unused], progress)
        # The middle of a body of hardly more than the mass may have too little of it on every side.
        status_of[unused[~chosen.any(axis=1)]] = VoxelStatus.UNSERVED
        which, face = np.nonzero(chosen)
        own = np.flatnonzero((status_of == VoxelStatus.VALID) | (status_of == VoxelStatus.UNSERVED))
        served = np.concatenate([own, unused[which]])
        kind = np.concatenate([kind_of[own], CubeKind.FACE_X_LOW + face]).astype(np.uint8)
        boxes = np.concatenate([boxes[own], face_boxes[which, face]])
        order = np.argsort(served, kind="stable")
        served, kind, boxes = served[order], kind[order], boxes[order]
    lost = status_of[served] == VoxelStatus.UNSERVED
    kind[lost] = CubeKind.POINT
    boxes[lost] = _cells(grid, voxels[served[lost]])
    status = np.zeros(grid.shape, np.uint8)
    status[tuple(voxels.T)] = status_of
    return CubeGeometry(
        grid=grid,
        status=status,
        voxel=flat[served],
        kind=kind,
        box_m=boxes,
        mass_kg=search.masses(boxes),
        average_mass_kg=wanted,
        rule=rule,
        notes=(
            *_cut_notes(body),
            *_island_notes(body, tissue.density_kg_m3 * grid.volumes_m3(), wanted),
            *_lost_notes(int(lost.sum()), wanted),
            *(_CENTRED_ONLY_NOTES if rule == CENTRED_ONLY else ()),
        ),
    )


@dataclass(frozen=True, eq=False)
class _Search:
    """The body as the kernels of :mod:`vop.kernels.cube_search` take it."""

    table: np.ndarray
    body: np.ndarray
    rho: np.ndarray
    edges: tuple[np.ndarray, np.ndarray, np.ndarray]
    wanted: float
    longest: float

    @classmethod
    def of(cls, grid: RectilinearGrid, tissue: Tissue, wanted: float) -> _Search:
        volumes, rho = grid.volumes_m3(), tissue.density_kg_m3.astype(np.float64)
        table = summed_volumes(rho * volumes, np.where(tissue.body, volumes, 0.0))
        # Wherever it begins, a cube of this side has reached every end of the grid.
        longest = 2.0 * max(float(e[-1] - e[0]) for e in grid.edges_m)
        return cls(table, tissue.body, rho, grid.edges_m, wanted, longest)

    def centred(self, voxels: np.ndarray, progress: Progress) -> tuple[np.ndarray, np.ndarray]:
        """Boxes (V, 6), and states (V,) uint8: VALID, UNUSED so far, or UNSERVED."""
        boxes, state = np.zeros((len(voxels), 6)), np.zeros(len(voxels), np.uint8)
        for part in _steps(len(voxels), "centred cubes", progress):
            centred_cubes(
                self.table,
                self.body,
                self.rho,
                *self.edges,
                voxels[part],
                self.wanted,
                self.longest,
                boxes[part],
                state[part],
            )
        return boxes, state

    def held(self, boxes: np.ndarray, state: np.ndarray) -> np.ndarray:
        """Voxels wholly inside some valid cube, (nz, ny, nx) bool."""
        count = np.zeros(tuple(s + 1 for s in self.body.shape), np.int32)
        mark_used(boxes, state, *self.edges, count)
        return count[:-1, :-1, :-1] > 0

    def faces(self, voxels: np.ndarray, progress: Progress) -> tuple[np.ndarray, np.ndarray]:
        """Boxes (V, 6, 6) of the face-anchored cubes, and which of them compete, (V, 6) bool."""
        boxes, chosen = np.zeros((len(voxels), 6, 6)), np.zeros((len(voxels), 6), bool)
        for part in _steps(len(voxels), "face-anchored cubes", progress):
            face_cubes(
                self.table,
                self.rho,
                *self.edges,
                voxels[part],
                self.wanted,
                self.longest,
                boxes[part],
                chosen[part],
            )
        return boxes, chosen

    def masses(self, boxes: np.ndarray) -> np.ndarray:
        """Mass of each box, kg."""
        out = np.empty(len(boxes))
        box_integrals(self.table[..., 0], *self.edges, boxes, out)
        return out


def _steps(count: int, label: str, progress: Progress) -> Iterator[slice]:
    for a in range(0, count, _STEP):
        yield slice(a, a + _STEP)
        progress(label, min(a + _STEP, count), count)


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


def _cut_notes(body: np.ndarray) -> list[str]:
    """Warnings where the body reaches the end of the grid."""
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


def _island_notes(body: np.ndarray, mass: np.ndarray, wanted: float) -> list[str]:
    """A warning where pieces of tissue that touch no other, not even at a corner, hold too little mass."""
    label, count = ndimage.label(body, np.ones((3, 3, 3), int))
    masses = np.bincount(label.ravel(), weights=mass.ravel(), minlength=count + 1)[1:]
    light = masses < wanted * (1.0 - MASS_TIE)
    if not light.any() or count == 1:
        return []
    voxels = int(light[label[label > 0] - 1].sum())
    return [
        f"WARNING: {int(light.sum())} of {count} separate pieces of tissue hold less than {wanted:g} kg "
        f"({voxels} voxels, {masses[light].sum():.3g} kg in all, {masses[light].max():.3g} kg the heaviest); "
        "their cubes reach over background into other tissue, which the rule allows and which dilutes "
        "their SAR"
    ]


def _lost_notes(count: int, wanted: float) -> list[str]:
    if not count:
        return []
    return [
        f"WARNING: the body holds less than {wanted:g} kg around {count} voxels; "
        "they keep their point SAR, the largest of which no average over them exceeds"
    ]
