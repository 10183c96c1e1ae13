"""The demo: an export any reader of its layout can read, that says what it is, and is physically sound."""

from __future__ import annotations

import tomllib
from pathlib import Path

import h5py
import numpy as np
import pytest

import vop
from vop.demo import DemoArray, write_demo
from vop.errors import OutputError

SMALL = DemoArray(n_channels=3, n_elements=4, length_m=0.08)


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    target = tmp_path_factory.mktemp("demo") / "try"
    write_demo(target, array=SMALL, step_m=0.004)
    return target


def test_everything_says_that_it_is_invented(folder: Path) -> None:
    assert "INVENTED" in (folder / "README.txt").read_text()
    assert "nvented" in (folder / "JOB.toml").read_text()
    with h5py.File(folder / "export" / "channel_01.h5") as handle:
        assert "INVENTED" in handle.attrs["note"]


def test_the_export_states_its_conventions_and_the_job_reads(folder: Path) -> None:
    job = tomllib.loads((folder / "JOB.toml").read_text())
    source = vop.open_fields(folder / job["input"]["path"], job["input"]["reader"])
    assert dict(source.conventions.stated_by) == dict.fromkeys(("phasor", "time_sign", "reference"), "file")
    assert source.n_channels == 3
    assert source.scattering is not None
    assert not source.scattering.any()


def test_absorbed_power_is_below_the_forward_power_and_near_what_the_solver_says(folder: Path) -> None:
    # Conservation: accepted = radiated + absorbed, so that the voxel sum must lie below 1 W per W for
    # every excitation; in a lossy ball this close most of it is absorbed.
    model = vop.build_sar_model(vop.open_fields(folder / "export"))
    values = np.linalg.eigvalsh(model.global_matrices["absorbed power"])
    assert values[-1] <= 1.0
    assert values[0] > 0.5


def test_an_occupied_folder_is_refused(tmp_path: Path) -> None:
    (tmp_path / "mine.txt").write_text("precious")
    with pytest.raises(OutputError, match="not an empty folder"):
        write_demo(tmp_path, array=SMALL, step_m=0.01)
    assert [f.name for f in tmp_path.iterdir()] == ["mine.txt"]


def test_the_same_array_gives_the_same_bytes(tmp_path: Path) -> None:
    for name in ("one", "two"):
        write_demo(tmp_path / name, array=SMALL, step_m=0.012)
    for file in sorted((tmp_path / "one" / "export").iterdir()):
        assert file.read_bytes() == (tmp_path / "two" / "export" / file.name).read_bytes()
