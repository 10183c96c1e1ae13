"""The layout "channel-hdf5", from files that h5py wrote, not our own writers."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest
from conftest import write_channel_hdf5

import vop

WHOLE = (slice(None), slice(None), slice(None))


def test_fields_are_divided_by_the_wave_that_drove_the_port(export_folder: Path, tmp_path: Path) -> None:
    wanted = write_channel_hdf5(tmp_path / "again", wave=0.3 + 0.1j)
    for folder in (export_folder, tmp_path / "again"):
        source = vop.open_fields(folder)
        found = np.array([source.electric(c, WHOLE) for c in range(3)])
        assert np.allclose(found, wanted, rtol=1e-5, atol=1e-6)
        assert source.conventions.reference == "forward power"


def test_rms_and_negative_time_sign_are_converted(tmp_path: Path) -> None:
    # Closed form: the peak is √2 times the rms value; e^{−jωt} phasors are the conjugates.
    stated = {"phasor": "rms", "time_sign": "-"}
    fields = write_channel_hdf5(tmp_path / "e", stated=stated)
    found = vop.open_fields(tmp_path / "e").electric(1, WHOLE)
    assert np.allclose(found, np.sqrt(2) * fields[1].conj(), rtol=1e-5, atol=1e-6)


def test_a_box_is_the_same_part_of_the_whole(export_folder: Path) -> None:
    source = vop.open_fields(export_folder)
    box = (slice(2, 5), slice(1, 4), slice(3, 7))
    assert np.array_equal(source.electric(2, box), source.electric(2, WHOLE)[:, 2:5, 1:4, 3:7])


def test_channels_are_ordered_by_number_not_by_letters(tmp_path: Path) -> None:
    write_channel_hdf5(tmp_path / "e", n_channels=1)
    first = (tmp_path / "e" / "channel_01.h5").read_bytes()
    (tmp_path / "e" / "channel_01.h5").unlink()
    for number in (10, 9, 2):
        (tmp_path / "e" / f"channel_{number}.h5").write_bytes(first)
    assert vop.open_fields(tmp_path / "e").channel_names == ("2", "9", "10")


def test_fields_on_nodes_are_told_from_the_shape_of_the_labels(export_folder: Path) -> None:
    with h5py.File(export_folder / "tissue.h5", "a") as handle:
        label = handle["label"][:-1, :-1, :-1]
        del handle["label"]
        handle["label"] = label
    source = vop.open_fields(export_folder)
    assert source.centring == "node"
    assert source.grid.shape == (8, 7, 6)
    assert source.electric(0, WHOLE).shape == (3, 9, 8, 7)


def test_tissue_values_follow_the_labels(export_folder: Path) -> None:
    tissue = vop.open_fields(export_folder).tissue
    assert tissue.density_kg_m3[0, 0, 0] == 0
    assert tissue.density_kg_m3[1, 1, 1] == 1090
    assert tissue.conductivity_s_m[4, 4, 3] == pytest.approx(0.07)
