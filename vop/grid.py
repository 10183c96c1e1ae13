"""Rectilinear grids of cells: where the voxels are, in metres.

Arrays over cells have shape (nz, ny, nx): x runs fastest, as in most exports.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from vop.errors import InputError

#: A box of cells: slices over z, y, x.
Box = tuple[slice, slice, slice]


@dataclass(frozen=True, eq=False)
class RectilinearGrid:
    """Cell edges along each axis: float64 arrays of nx+1, ny+1, nz+1 ascending values, in metres."""

    x_edges_m: np.ndarray
    y_edges_m: np.ndarray
    z_edges_m: np.ndarray

    def __post_init__(self) -> None:
        for name in ("x_edges_m", "y_edges_m", "z_edges_m"):
            edges = np.ascontiguousarray(getattr(self, name), dtype=np.float64)
            if edges.ndim != 1 or edges.size < 2:
                raise InputError(f"grid axis {name}: needs at least two cell edges, got {edges.shape}")
            if not np.all(np.isfinite(edges)) or not np.all(np.diff(edges) > 0):
                raise InputError(f"grid axis {name}: cell edges must be finite and ascending")
            object.__setattr__(self, name, edges)

    @classmethod
    def from_centres(cls, x: np.ndarray, y: np.ndarray, z: np.ndarray) -> RectilinearGrid:
        """Grid whose cell centres are ``x``, ``y``, ``z`` (metres, ascending, at least two each).

        Edges lie midway between centres, the outermost half a step beyond; on a uniform axis that
        is exact, on a graded one it is the only choice the centres allow.
        """
        return cls(
            *(
                _edges_from_centres(np.asarray(a, dtype=np.float64), n)
                for a, n in ((x, "x"), (y, "y"), (z, "z"))
            )
        )

    @property
    def shape(self) -> tuple[int, int, int]:
        """(nz, ny, nx), cells."""
        return self.z_edges_m.size - 1, self.y_edges_m.size - 1, self.x_edges_m.size - 1

    @property
    def edges_m(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Cell edges in array order: z, y, x."""
        return self.z_edges_m, self.y_edges_m, self.x_edges_m

    @property
    def centres_m(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Cell centres in array order: z, y, x."""
        z, y, x = (0.5 * (e[1:] + e[:-1]) for e in self.edges_m)
        return z, y, x

    def volumes_m3(self, box: Box = (slice(None), slice(None), slice(None))) -> np.ndarray:
        """Cell volumes in m³, float64, of the cells of ``box``, shape (dz, dy, dx)."""
        dz, dy, dx = (np.diff(e)[s] for e, s in zip(self.edges_m, box, strict=True))
        return dz[:, None, None] * dy[None, :, None] * dx[None, None, :]

    def is_uniform(self, relative: float = 1e-6) -> bool:
        """Whether all steps along each axis agree to ``relative``."""
        return all(np.ptp(np.diff(e)) <= relative * np.diff(e).max() for e in self.edges_m)


def _edges_from_centres(centres: np.ndarray, name: str) -> np.ndarray:
    if centres.ndim != 1 or centres.size < 2:
        raise InputError(f"grid axis {name}: needs at least two cell centres, got {centres.shape}")
    if not np.all(np.isfinite(centres)) or not np.all(np.diff(centres) > 0):
        raise InputError(f"grid axis {name}: cell centres must be finite and ascending")
    inner = 0.5 * (centres[1:] + centres[:-1])
    first = centres[0] - (inner[0] - centres[0])
    last = centres[-1] + (centres[-1] - inner[-1])
    return np.concatenate([[first], inner, [last]])
