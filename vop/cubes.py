"""Where local matrices live: averaging cubes, and how each voxel of the body is served."""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import IntEnum

import numpy as np

from vop.grid import RectilinearGrid


class CubeKind(IntEnum):
    """What a local matrix was averaged over."""

    POINT = 0  #: one voxel, no averaging
    CENTRED = 1  #: valid cube centred on its voxel
    FACE_X_LOW = 2  #: voxel centred on the cube's low-x face; the cube extends towards +x
    FACE_X_HIGH = 3
    FACE_Y_LOW = 4
    FACE_Y_HIGH = 5
    FACE_Z_LOW = 6
    FACE_Z_HIGH = 7


class VoxelStatus(IntEnum):
    """How a voxel gets its averaged SAR."""

    BACKGROUND = 0
    VALID = 1  #: its own centred cube is valid
    USED = 2  #: inside the valid cube of another voxel; adds no matrix
    UNUSED = 3  #: served by face-anchored cubes
    UNSERVED = 4  #: no cube of the wanted mass exists (an island of too little tissue)


@dataclass(frozen=True, eq=False)
class CubeGeometry:
    """Averaging cubes of one body; depends on the tissue alone.

    grid : the voxels.
    status : (nz, ny, nx) uint8, :class:`VoxelStatus`.
    voxel : (N,) int64, flat index (C order over z, y, x) of the voxel that each cube serves.
    kind : (N,) uint8, :class:`CubeKind`.
    box_m : (N, 6) float64, metres: x0, x1, y0, y1, z0, z1.
    mass_kg : (N,) float64, tissue mass inside the box.
    average_mass_kg : the mass asked for, or None for point matrices.
    rule : name of the averaging rule, for the record.
    notes : what was decided where the rule is silent, and warnings found on the way.
    """

    grid: RectilinearGrid
    status: np.ndarray
    voxel: np.ndarray
    kind: np.ndarray
    box_m: np.ndarray
    mass_kg: np.ndarray
    average_mass_kg: float | None
    rule: str
    notes: tuple[str, ...] = ()

    def __len__(self) -> int:
        return int(self.voxel.size)

    def take(self, index: np.ndarray) -> CubeGeometry:
        """The cubes at ``index`` only; ``status`` stays whole."""
        return replace(
            self,
            voxel=self.voxel[index],
            kind=self.kind[index],
            box_m=self.box_m[index],
            mass_kg=self.mass_kg[index],
        )

    def counts(self) -> dict[str, int]:
        """Voxels by status and cubes by kind, for the record."""
        voxels = {
            f"voxels {s.name.lower()}": int((self.status == s).sum())
            for s in VoxelStatus
            if s is not VoxelStatus.BACKGROUND
        }
        faces = int((self.kind >= CubeKind.FACE_X_LOW).sum())
        return {
            **voxels,
            "matrices": len(self),
            "matrices of points": int((self.kind == CubeKind.POINT).sum()),
            "matrices of centred cubes": int((self.kind == CubeKind.CENTRED).sum()),
            "matrices of face-anchored cubes": faces,
        }

    def centres_m(self) -> np.ndarray:
        """(N, 3) float64: x, y, z of the centre of each served voxel, metres."""
        z, y, x = self.grid.centres_m
        k, j, i = np.unravel_index(self.voxel, self.grid.shape)
        return np.stack([x[i], y[j], z[k]], axis=-1)
