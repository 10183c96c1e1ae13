"""Bad input gets one clear line, and nothing is lost."""

from __future__ import annotations

import shutil
from pathlib import Path

import h5py
import numpy as np
import pytest
from conftest import random_matrices, write_channel_hdf5

import vop
from vop import storage
from vop.errors import ConventionError, InputError, OutputError, PluginError


def _open(folder: Path, **options: str) -> vop.FieldSource:
    return vop.open_fields(folder, **options)


def test_a_missing_folder_is_named(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="nowhere"):
        _open(tmp_path / "nowhere")


def test_a_truncated_channel_file_is_named(export_folder: Path) -> None:
    victim = export_folder / "channel_02.h5"
    victim.write_bytes(victim.read_bytes()[: victim.stat().st_size // 2])
    with pytest.raises(InputError, match=r"channel_02\.h5"):
        _open(export_folder)


def test_a_missing_dataset_is_named(export_folder: Path) -> None:
    with h5py.File(export_folder / "channel_01.h5", "a") as handle:
        del handle["E/imag"]
    with pytest.raises(InputError, match=r"channel_01\.h5.*imag"):
        _open(export_folder)


def test_channels_of_unequal_grids_are_refused(export_folder: Path) -> None:
    with h5py.File(export_folder / "channel_03.h5", "a") as handle:
        handle["axes/x"][...] += 0.002
    with pytest.raises(InputError, match=r"channel_03\.h5.*axis x"):
        _open(export_folder)


@pytest.mark.parametrize("value", [np.nan, np.inf])
def test_a_field_that_is_not_finite_in_tissue_is_refused(export_folder: Path, value: float) -> None:
    with h5py.File(export_folder / "channel_01.h5", "a") as handle:
        handle["E/real"][1, 4, 4, 3] = value
    with pytest.raises(InputError, match=r"(?i)channel 1.*NaN|NaN.*channel 1|not finite"):
        vop.build_sar_model(_open(export_folder), average_mass=None)


def test_a_field_that_is_not_finite_in_air_does_not_matter(export_folder: Path) -> None:
    with h5py.File(export_folder / "channel_01.h5", "a") as handle:
        handle["E/real"][1, 0, 0, 0] = np.nan
    with h5py.File(export_folder / "channel_01.h5") as handle:
        assert np.isnan(handle["E/real"][1, 0, 0, 0])
    model = vop.build_sar_model(_open(export_folder), average_mass=None)
    assert np.isfinite(model.packed).all()


@pytest.mark.parametrize(
    ("name", "value", "words"),
    [
        ("density", 0.0, "zero density"),
        ("density", -1.0, "density"),
        ("conductivity", -0.1, "conductivity"),
        ("conductivity", np.nan, "conductivity"),
    ],
)
def test_absurd_tissue_is_refused_with_its_place(
    export_folder: Path, name: str, value: float, words: str
) -> None:
    with h5py.File(export_folder / "tissue.h5", "a") as handle:
        handle[name][1] = value
    with pytest.raises(InputError, match=rf"{words}.*muscle"):
        _open(export_folder)


def test_conventions_that_nobody_states_are_refused(tmp_path: Path) -> None:
    write_channel_hdf5(tmp_path / "e", stated={"note": "nothing stated"})
    with pytest.raises(ConventionError, match=r"phasor.*time_sign"):
        _open(tmp_path / "e")
    assert _open(tmp_path / "e", phasor="peak", time_sign="+").conventions.stated_by["phasor"] == "option"


def test_an_option_that_contradicts_the_file_is_refused(export_folder: Path) -> None:
    with pytest.raises(ConventionError, match=r"peak.*rms"):
        _open(export_folder, phasor="rms")


def test_a_misspelt_option_is_refused_with_the_right_one(export_folder: Path) -> None:
    with pytest.raises(PluginError, match=r"phaser.*did you mean 'phasor'"):
        _open(export_folder, phaser="peak")


def test_matrices_that_are_not_hermitian_are_refused() -> None:
    q = random_matrices(np.random.default_rng(0), 4, 3)
    q[2, 0, 1] += 0.1j * abs(q[2]).max()
    with pytest.raises(InputError, match="matrix 2 is not Hermitian"):
        vop.SarModel.from_matrices(q)


def test_indefinite_matrices_are_refused() -> None:
    q = random_matrices(np.random.default_rng(0), 4, 3)
    q[1] -= 0.01 * np.eye(3) * abs(q[1]).max()
    q[1] = q[1] - np.eye(3) * np.linalg.eigvalsh(q[1])[1]
    with pytest.raises(InputError, match="matrix 1 is indefinite"):
        vop.SarModel.from_matrices(q)


def test_matrices_rounded_to_single_precision_are_accepted() -> None:
    # Rounding entry by entry makes rank-one matrices slightly indefinite; that is no fault.
    q = random_matrices(np.random.default_rng(0), 500, 8, rank=1).astype(np.complex64)
    assert np.linalg.eigvalsh(q.astype(complex)).min() < 0
    assert len(vop.SarModel.from_matrices(q)) == 500


@pytest.mark.parametrize("value", [0.0, -0.1, np.nan, np.inf])
def test_an_absurd_overestimation_is_refused(value: float) -> None:
    model = vop.SarModel.from_matrices(random_matrices(np.random.default_rng(0), 4, 3))
    with pytest.raises(InputError, match="overestimation"):
        vop.compress(model, overestimation=value)


def test_an_unknown_method_is_refused_with_the_known_ones() -> None:
    model = vop.SarModel.from_matrices(random_matrices(np.random.default_rng(0), 4, 3))
    with pytest.raises(vop.VopError, match="clustering"):
        vop.compress(model, method="magic")


def test_an_output_that_exists_is_kept(tmp_path: Path) -> None:
    model = vop.SarModel.from_matrices(random_matrices(np.random.default_rng(0), 4, 3))
    path = tmp_path / "model.h5"
    path.write_text("precious")
    with pytest.raises(OutputError, match="--force"):
        model.save(path)
    assert path.read_text() == "precious"
    model.save(path, force=True)
    assert len(vop.SarModel.load(path)) == 4


def test_an_interrupted_write_leaves_nothing_under_the_final_name(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    model = vop.SarModel.from_matrices(random_matrices(np.random.default_rng(0), 4, 3))

    def interrupt(self: vop.SarModel) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(vop.SarModel, "chunks", interrupt)
    with pytest.raises(KeyboardInterrupt):
        model.save(tmp_path / "model.h5")
    assert list(tmp_path.iterdir()) == []


def _write_to_a_full_disk(path: Path) -> None:
    with storage.atomic_path(path) as temporary:
        temporary.write_text("begun")
        with open("/dev/full", "w") as full:
            full.write("x" * 10)
            full.flush()


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs the device that is always full")
def test_a_full_disk_is_one_line(tmp_path: Path) -> None:
    with pytest.raises(OutputError, match="disk is full"):
        _write_to_a_full_disk(tmp_path / "x")
    assert list(tmp_path.iterdir()) == []


def test_a_damaged_model_is_noticed(tmp_path: Path) -> None:
    model = vop.SarModel.from_matrices(random_matrices(np.random.default_rng(0), 40, 3))
    path = tmp_path / "model.h5"
    model.save(path)
    whole = path.read_bytes()
    needle = model.packed[7].tobytes()
    at = whole.index(needle)
    path.write_bytes(whole[:at] + b"\x00\x00\x00\x3f" + whole[at + 4 :])
    with pytest.raises(InputError, match="seal"):
        vop.SarModel.load(path)
    path.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(InputError, match=r"model\.h5"):
        vop.SarModel.load(path)


def test_a_file_of_another_kind_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "other.h5"
    with storage.create_hdf5(path) as handle:
        handle["x"] = 1
    with pytest.raises(InputError, match="vop-set"):
        vop.VopSet.load(path)
    with pytest.raises(InputError, match="vop-sar-model"):
        vop.SarModel.load(path)


def test_a_folder_that_vanishes_in_mid_read_is_one_line(export_folder: Path) -> None:
    source = _open(export_folder)
    shutil.rmtree(export_folder)
    with pytest.raises(InputError, match="channel_01"):
        vop.build_sar_model(source)


def test_fields_that_absorb_more_than_they_are_given_are_refused(tmp_path: Path) -> None:
    write_channel_hdf5(tmp_path / "e")
    for file in (tmp_path / "e").glob("channel_*.h5"):
        with h5py.File(file, "a") as handle:
            handle.attrs["incident_wave"] = 1e-5 * handle.attrs["incident_wave"]
    with pytest.raises(InputError, match=r"passivity violated.*eigenvalue"):
        vop.build_sar_model(_open(tmp_path / "e"), average_mass=None, path=tmp_path / "model.h5")
    assert [f.name for f in tmp_path.iterdir()] == ["e"]
