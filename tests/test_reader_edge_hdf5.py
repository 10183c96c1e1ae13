"""The layout "edge-hdf5", from a file that h5py wrote."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest

import vop
from vop.errors import InputError

SHAPE = (4, 5, 6)


@pytest.fixture
def staggered(tmp_path: Path) -> tuple[Path, dict[str, np.ndarray]]:
    """An invented export of two channels on cell edges."""
    rng = np.random.default_rng(0)
    nz, ny, nx = SHAPE
    shapes = {"Ex": (nz + 1, ny + 1, nx), "Ey": (nz + 1, ny, nx + 1), "Ez": (nz, ny + 1, nx + 1)}
    values = {}
    path = tmp_path / "staggered.h5"
    with h5py.File(path, "w") as handle:
        for axis, count in zip("zyx", SHAPE, strict=True):
            handle[f"edges/{axis}"] = np.cumsum(np.linspace(0.002, 0.004, count + 1))
        handle["tissue/conductivity"] = np.full(SHAPE, 0.5)
        handle["tissue/density"] = np.full(SHAPE, 1000.0)
        for channel in ("10", "9"):
            for name, shape in shapes.items():
                e = (rng.normal(size=shape) + 1j * rng.normal(size=shape)).astype(np.complex64)
                handle[f"channels/{channel}/{name}"] = values[channel + name] = e
        handle.attrs.update(frequency=128e6, phasor="peak", time_sign="+", reference="port current")
    return path, values


def test_each_component_keeps_its_own_edges(staggered: tuple[Path, dict[str, np.ndarray]]) -> None:
    path, values = staggered
    source = vop.open_fields(path)
    assert source.channel_names == ("9", "10")
    assert source.centring == "edge"
    e = source.electric(1, (slice(1, 3), slice(0, 4), slice(2, 6)))
    assert e.shape == (3, 3, 5, 5)
    assert np.array_equal(e[0, :, :, :-1], values["10Ex"][1:4, 0:5, 2:6])
    assert np.array_equal(e[1, :, :-1, :], values["10Ey"][1:4, 0:4, 2:7])
    assert np.array_equal(e[2, :-1, :, :], values["10Ez"][1:3, 0:5, 2:7])


def test_a_component_on_the_wrong_edges_is_named(staggered: tuple[Path, dict[str, np.ndarray]]) -> None:
    path, values = staggered
    with h5py.File(path, "a") as handle:
        del handle["channels/9/Ey"]
        handle["channels/9/Ey"] = values["9Ex"]
    with pytest.raises(InputError, match=r"channels/9/Ey should be complex of shape \(5, 5, 7\)"):
        vop.open_fields(path)
