"""SAR of excitations: the peak over a model, where it lies, and the map behind it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from vop.cubes import CubeKind, VoxelStatus
from vop.errors import InputError
from vop.hermitian import pack_excitations
from vop.kernels.sar_map import spread_over_used
from vop.metadata import LOCAL_SAR
from vop.sarmodel import SarModel


@dataclass(frozen=True, eq=False)
class PeakSar:
    """Peak spatial-average SAR of M excitations.

    sar_w_kg : (M,) float64. index : (M,) int64, row of the model that sets it.
    position_m : (M, 3) float64, x, y, z of the voxel that its cube serves, or None for bare matrices.
    kind : (M,) uint8, :class:`vop.cubes.CubeKind`, or None for bare matrices.
    """

    sar_w_kg: np.ndarray
    index: np.ndarray
    position_m: np.ndarray | None
    kind: np.ndarray | None


def peak_spatial_average(model: SarModel, w: np.ndarray) -> PeakSar:
    """Largest wᴴQw over all matrices.

    Parameters
    ----------
    w : (n,) or (M, n) complex, in the unit of the model's reference.

    Returns
    -------
    PeakSar with M = 1 for a single excitation; of equal peaks the lowest row is named.

    Raises
    ------
    InputError
        Where w has the wrong number of channels or is not finite.
    """
    functionals = pack_excitations(_checked(model, w))
    best: np.ndarray = np.full(len(functionals), -np.inf)
    index = np.zeros(len(functionals), dtype=np.int64)
    at = 0
    for rows in model.chunks():
        sar = rows.astype(np.float64) @ functionals.T
        here = sar.argmax(axis=0)
        value = sar[here, np.arange(sar.shape[1])]
        index = np.where(value > best, at + here, index)
        best = np.maximum(best, value)
        at += len(rows)
    if model.cubes is None:
        return PeakSar(best, index, None, None)
    return PeakSar(best, index, model.cubes.take(index).centres_m(), model.cubes.kind[index])


def sar_map(model: SarModel, w: np.ndarray) -> np.ndarray:
    """Averaged SAR of every voxel for one excitation.

    A voxel with a valid cube has that cube's SAR; a used one the largest of the valid cubes that
    wholly hold it; an unused one the largest of its face-anchored cubes.

    Parameters
    ----------
    w : (n,) complex.

    Returns
    -------
    (nz, ny, nx) float64, W/kg; NaN in background.

    Raises
    ------
    InputError
        Where the model has no cubes, or w does not fit.
    """
    if model.cubes is None:
        raise InputError("the model holds bare matrices without positions; there is no map to draw")
    excitation = _checked(model, w)
    if len(excitation) != 1:
        raise InputError(f"a map shows one excitation, got {len(excitation)}")
    functional = pack_excitations(excitation)[0]
    sar = np.concatenate([rows.astype(np.float64) @ functional for rows in model.chunks()])
    cubes = model.cubes
    out: np.ndarray = np.full(cubes.status.size, -np.inf)
    np.maximum.at(out, cubes.voxel, sar)
    out = out.reshape(cubes.status.shape)
    centred = np.flatnonzero(cubes.kind == CubeKind.CENTRED)
    ez, ey, ex = cubes.grid.edges_m
    used = cubes.status == VoxelStatus.USED
    spread_over_used(cubes.box_m[centred], sar[centred], used, ez, ey, ex, out)
    out[cubes.status == VoxelStatus.BACKGROUND] = np.nan
    return out


def _checked(model: SarModel, w: np.ndarray) -> np.ndarray:
    if model.metadata.measure != LOCAL_SAR:
        raise InputError(
            f"the model holds {model.metadata.measure}, not W/kg; take the model that was divided by limits"
        )
    w = np.atleast_2d(np.asarray(w, dtype=np.complex128))
    if w.ndim != 2 or w.shape[1] != model.n_channels:
        raise InputError(f"excitation of shape {w.shape} for a model of {model.n_channels} channels")
    if not np.isfinite(w).all():
        raise InputError("excitation holds NaN or infinite values")
    return w
