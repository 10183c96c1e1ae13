"""The demo: an export any reader of its layout can read, that says what it is, and is physically sound."""

from __future__ import annotations

import tomllib
from pathlib import Path

import h5py
import numpy as np
import pytest

import vop
from vop.demo import DemoArray, Solution, write_demo
from vop.demo.array import decoupled_currents, resistance_matrix
from vop.demo.layered_sphere import free_space_field
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


def test_absorbed_power_is_what_the_solver_says_but_for_the_staircase(folder: Path) -> None:
    # Conservation: accepted (1 W per |w|², by construction) is radiated plus absorbed. Radiated power from
    # the far field of the solver; voxels of 4 mm against a skin of 2.5 mm leave some per cent.
    solution = Solution(SMALL.sphere(), 90)
    elements, owner = SMALL.elements()
    nodes, weights = np.polynomial.legendre.leggauss(24)
    phi = 2 * np.pi * np.arange(48) / 48
    sine = np.sqrt(1 - nodes**2)
    parts = np.outer(sine, np.cos(phi)), np.outer(sine, np.sin(phi)), np.outer(nodes, np.ones(48))
    unit, solid = np.stack(parts, -1).reshape(-1, 3), np.repeat(weights, 48) * 2 * np.pi / 48
    far = 1e4
    e = solution.field(elements, owner, 3, far * unit, scattered=True)
    np.add.at(e, owner, free_space_field(solution.sphere.k0, solution.sphere.omega, elements, far * unit))
    e = np.einsum("cd,cav->dav", decoupled_currents(resistance_matrix(solution, elements, owner)), e)
    radiated = np.einsum("iav,jav,v->ij", e.conj(), e, solid) * far**2 / (2 * 376.730313668)
    model = vop.build_sar_model(vop.open_fields(folder / "export"))
    missing = np.eye(3) - radiated - model.global_matrices["absorbed power"]
    assert np.abs(np.linalg.eigvalsh(missing)).max() < 0.05


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
