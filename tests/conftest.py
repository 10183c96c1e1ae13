"""Shared pieces of the tests: small invented inputs, written with general-purpose libraries only."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest


def random_matrices(rng: np.random.Generator, count: int, n: int, rank: int = 3) -> np.ndarray:
    """(count, n, n) Hermitian positive semidefinite matrices of the given rank, invented."""
    e = rng.normal(size=(count, rank, n)) + 1j * rng.normal(size=(count, rank, n))
    decay = 10.0 ** rng.uniform(-1.5, 0, size=(count, 1, 1))
    return decay * np.einsum("vri,vrj->vij", e.conj(), e)


def write_channel_hdf5(
    folder: Path,
    *,
    n_channels: int = 3,
    shape: tuple[int, int, int] = (9, 8, 7),
    step_m: float = 0.004,
    seed: int = 0,
    wave: complex = 0.5 - 2.0j,
    stated: dict[str, str] | None = None,
) -> np.ndarray:
    """Write an invented export in the layout "channel-hdf5" with h5py, as a simulator would.

    Returns the fields per unit excitation, (n, 3, z, y, x) complex64.
    """
    rng = np.random.default_rng(seed)
    folder.mkdir(parents=True, exist_ok=True)
    axes = {a: step_m * (np.arange(count) - count / 2) for a, count in zip("zyx", shape, strict=True)}
    label = np.zeros(shape, np.uint8)
    label[1:-1, 1:-1, 1:-1] = 1
    label[3:-3, 3:-3, 3:-3] = 2
    fields = rng.normal(size=(n_channels, 3, *shape)) + 1j * rng.normal(size=(n_channels, 3, *shape))
    fields = (fields * (label > 0)).astype(np.complex64)
    for channel in range(n_channels):
        with h5py.File(folder / f"channel_{channel + 1:02d}.h5", "w") as handle:
            raw = fields[channel] * wave
            handle["E/real"], handle["E/imag"] = raw.real, raw.imag
            for a, values in axes.items():
                handle[f"axes/{a}"] = values
            handle.attrs["frequency"] = 297.2e6
            handle.attrs["incident_wave"] = [wave.real, wave.imag]
            for name, value in (stated or {"phasor": "peak", "time_sign": "+"}).items():
                handle.attrs[name] = value
    with h5py.File(folder / "tissue.h5", "w") as handle:
        handle["label"] = label
        handle["names"] = ["background", "muscle", "fat"]
        handle["conductivity"] = [0.0, 0.77, 0.07]
        handle["density"] = [0.0, 1090.0, 911.0]
        for a, values in axes.items():
            handle[f"axes/{a}"] = values
    return fields


@pytest.fixture
def export_folder(tmp_path: Path) -> Path:
    """A small invented export that states its conventions."""
    write_channel_hdf5(tmp_path / "export")
    return tmp_path / "export"
