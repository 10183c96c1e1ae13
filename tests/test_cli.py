"""The command as its user meets it: exit codes, one-line errors, pipes, interruption."""

from __future__ import annotations

import json
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import scipy.io
from conftest import random_matrices, write_channel_hdf5

import vop

JOB = """\
[input]
path = "export"
power_account = "invented data"
[model]
average_mass_kg = 1e-4
[compress]
overestimation = 0.2
[export]
formats = ["hdf5", "mat5"]
"""


def run_vop(*arguments: str, cwd: Path) -> subprocess.CompletedProcess[str]:
    """The command in a process of its own."""
    return subprocess.run([sys.executable, "-m", "vop", *arguments], cwd=cwd, capture_output=True, text=True)


@pytest.fixture
def job_folder(tmp_path: Path) -> Path:
    """A folder with a small invented export and its job."""
    fields = write_channel_hdf5(tmp_path / "export", shape=(12, 11, 10), wave=300.0)
    assert np.isfinite(fields).all()
    (tmp_path / "JOB.toml").write_text(JOB)
    return tmp_path


def test_every_command_has_help_with_an_example(tmp_path: Path) -> None:
    listed = run_vop("--help", cwd=tmp_path).stdout
    commands = re.findall(r"^  (\w+) {2,}\S", listed[listed.index("Commands:") :], re.MULTILINE)
    assert {"run", "demo", "inspect", "model", "compress", "prove", "export", "plugins"} <= set(commands)
    for command in commands:
        done = run_vop(command, "--help", cwd=tmp_path)
        assert done.returncode == 0
        assert f"vop {command}" in done.stdout[done.stdout.index("Example:") :]


def test_a_job_leaves_everything_in_one_folder_and_reuses_it(job_folder: Path) -> None:
    done = run_vop("run", "JOB.toml", cwd=job_folder)
    assert done.returncode == 0, done.stderr
    result = job_folder / "result"
    names = {f.name for f in result.iterdir()} - {".lock"}
    assert names == {
        "model.h5",
        "set.h5",
        "certificate.h5",
        "proof.json",
        "summary.txt",
        "vops-hdf5.h5",
        "vops-mat5.mat",
    }
    assert json.loads((result / "proof.json").read_text())["holds"] is True
    summary = (result / "summary.txt").read_text()
    assert summary == done.stdout
    assert "qualified people" in summary
    assert scipy.io.loadmat(result / "vops-mat5.mat")["vop"].shape[:2] == (3, 3)

    stamps = {n: (result / n).stat().st_mtime_ns for n in ("model.h5", "set.h5")}
    again = run_vop("run", "JOB.toml", cwd=job_folder)
    assert again.returncode == 0, again.stderr
    assert again.stdout == done.stdout
    assert "reused" in again.stderr
    assert stamps == {n: (result / n).stat().st_mtime_ns for n in stamps}

    (job_folder / "JOB.toml").write_text(JOB.replace("0.2", "0.1"))
    refused = run_vop("run", "JOB.toml", cwd=job_folder)
    assert refused.returncode == 2
    assert "--force" in refused.stderr
    forced = run_vop("run", "JOB.toml", "--force", cwd=job_folder)
    assert forced.returncode == 0, forced.stderr


def test_each_step_is_a_command_of_its_own(job_folder: Path) -> None:
    for arguments in (
        ("inspect", "export"),
        ("model", "export", "--average-mass", "0.1"),
        ("compress", "model.h5", "--overestimation", "0.2"),
        ("prove", "set.h5", "model.h5", "--certificate", "certificate.h5"),
        ("prove", "set.h5", "model.h5", "--from-certificate", "certificate.h5"),
        ("inspect", "set.h5"),
        ("export", "set.h5", "vops.mat", "--format", "mat5"),
    ):
        done = run_vop(*arguments, cwd=job_folder)
        assert done.returncode == 0, (arguments, done.stderr)
        assert done.stdout


def test_an_unproved_set_exits_with_one_and_is_not_handed_off(job_folder: Path) -> None:
    from dataclasses import replace

    assert run_vop("run", "JOB.toml", cwd=job_folder).returncode == 0
    result = job_folder / "result"
    whole = vop.VopSet.load(result / "set.h5")
    replace(whole, packed=0.5 * whole.packed).save(job_folder / "half.h5")
    done = run_vop("prove", "half.h5", "result/model.h5", cwd=job_folder)
    assert done.returncode == 1
    replace(whole, packed=0.5 * whole.packed).save(result / "set.h5", force=True)
    for name in ("proof.json", "vops-hdf5.h5", "vops-mat5.mat"):
        (result / name).unlink()
    again = run_vop("run", "JOB.toml", cwd=job_folder)
    assert again.returncode == 1
    assert not (result / "vops-hdf5.h5").exists()


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("run", "missing.toml"), "missing.toml"),
        (("compress", "missing.h5"), "missing.h5"),
        (("model", "empty", "-o", "new.h5"), "no reader recognises"),
        (("compress", "model.h5", "--overestimation", "0"), "overestimation"),
        (("compress", "model.h5", "--overestimation", "nan"), "overestimation"),
        (("compress", "model.h5", "--method", "magic"), "magic"),
        (("compress", "model.h5", "-o", "nowhere/set.h5"), "nowhere"),
        (("compress", "model.h5", "-o", "exists.h5"), "--force"),
        (("export", "model.h5", "x.mat"), "vop-set"),
        (("export", "model.h5", "x.mat", "--fromat", "mat5"), "format"),
        (("nonsense",), "nonsense"),
    ],
)
def test_a_mistake_is_one_line_and_exit_code_two(
    tmp_path: Path, arguments: tuple[str, ...], words: str
) -> None:
    vop.SarModel.from_matrices(random_matrices(np.random.default_rng(0), 5, 3)).save(tmp_path / "model.h5")
    (tmp_path / "empty").mkdir()
    (tmp_path / "exists.h5").write_text("precious")
    done = run_vop(*arguments, cwd=tmp_path)
    assert done.returncode == 2, done.stderr
    assert words in done.stderr
    assert "Traceback" not in done.stderr
    assert (tmp_path / "exists.h5").read_text() == "precious"


def test_output_can_be_piped_into_a_reader_that_stops(tmp_path: Path) -> None:
    line = f"{sys.executable} -m vop plugins | head -n 1"
    done = subprocess.run(
        ["bash", "-o", "pipefail", "-c", line], cwd=tmp_path, capture_output=True, text=True
    )
    assert done.stdout.strip() == "Readers"
    assert "Traceback" not in done.stderr
    assert "BrokenPipe" not in done.stderr


def test_interruption_leaves_no_unfinished_file(tmp_path: Path) -> None:
    rng = np.random.default_rng(0)
    vop.SarModel.from_matrices(random_matrices(rng, 40_000, 8, rank=2)).save(tmp_path / "model.h5")
    process = subprocess.Popen(
        [sys.executable, "-m", "vop", "compress", "model.h5", "--overestimation", "0.001"],
        cwd=tmp_path,
        stderr=subprocess.PIPE,
        text=True,
    )
    time.sleep(4)
    assert process.poll() is None, "finished before it could be interrupted"
    os.kill(process.pid, signal.SIGINT)
    _, errors = process.communicate(timeout=60)
    assert process.returncode == 130, errors
    assert "Traceback" not in errors
    assert [f.name for f in tmp_path.iterdir()] == ["model.h5"]


def test_help_is_quick_because_nothing_heavy_is_imported(tmp_path: Path) -> None:
    # No clock: the promise is that the expensive packages stay out.
    code = (
        "import sys; from vop.cli.main import main; main(['--help'], standalone_mode=False);"
        "print(sorted({'numpy', 'numba', 'scipy', 'h5py'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=tmp_path, capture_output=True, text=True)
    assert done.stdout.strip().endswith("[]"), done.stdout


def test_regions_limits_and_the_exposed_part_go_through_a_job(job_folder: Path) -> None:
    (job_folder / "regions.toml").write_text(
        'default = "trunk"\n[[rule]]\nregion = "extremity"\ntissues = ["fat"]\n'
    )
    exposed = np.zeros((12, 11, 10), bool)
    exposed[:6] = True
    np.save(job_folder / "exposed.npy", exposed)
    (job_folder / "JOB.toml").write_text(
        JOB + '[regions]\nfile = "regions.toml"\nexposed = "exposed.npy"\n[limits]\ntable = "limits.toml"\n'
    )
    (job_folder / "limits.toml").write_text(
        'mode = "bench"\nsource = "invented for this test"\nlocal_mass_kg = 1e-4\n'
        "[local]\nhead = 1.0\ntrunk = 10.0\nextremity = 20.0\n"
    )
    done = run_vop("run", "JOB.toml", cwd=job_folder)
    assert done.returncode == 0, done.stderr
    assert "fractions of the local limits of mode 'bench'" in done.stdout
    model = vop.SarModel.load(job_folder / "result" / "model.h5")
    vop_set = vop.VopSet.load(job_folder / "result" / "set.h5")
    assert {"partial body", "extremity", "trunk", "whole body", "absorbed power"} <= set(
        model.global_matrices
    )
    assert vop_set.global_matrices.keys() == model.global_matrices.keys()
