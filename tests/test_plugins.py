"""Plugins come through one door, ours and others'; a broken one never takes the command down."""

from __future__ import annotations

import re
import subprocess
import sys
from importlib.metadata import EntryPoint
from pathlib import Path

import h5py
import numpy as np
import pytest
from conftest import write_channel_hdf5

from vop import plugins
from vop.errors import PluginError

ROOT = Path(__file__).resolve().parents[1]


def _install_example(folder: Path) -> Path:
    """Build the two files printed in DEVELOPERS.md and install them into a folder of their own."""
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    section = text[text.index("## Writing a plugin") :]
    project = re.search(r"```toml\n(.*?)```", section, re.DOTALL)
    module = re.search(r"```python\n(.*?)```", section, re.DOTALL)
    assert project is not None
    assert module is not None
    source = folder / "source"
    source.mkdir()
    (source / "pyproject.toml").write_text(project[1], encoding="utf-8")
    (source / "bundle_reader.py").write_text(module[1], encoding="utf-8")
    site = folder / "site"
    subprocess.run(
        [
            sys.executable,
            "-m",
            "pip",
            "install",
            "--quiet",
            "--no-index",
            "--no-deps",
            "--no-build-isolation",
            "--target",
            str(site),
            str(source),
        ],
        check=True,
        capture_output=True,
    )
    return site


def _vop(site: Path, *arguments: str, cwd: Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "vop", *arguments],
        capture_output=True,
        text=True,
        cwd=cwd,
        env={"PYTHONPATH": str(site), "PATH": "/usr/bin:/bin", "HOME": str(cwd)},
    )


def test_the_documented_plugin_is_installed_and_runs_from_outside_the_tree(tmp_path: Path) -> None:
    site = _install_example(tmp_path)
    fields = write_channel_hdf5(tmp_path / "export", wave=1.0)
    with h5py.File(tmp_path / "export" / "tissue.h5") as handle:
        label = handle["label"][()]
        tissue = {
            name: handle[key][()][label] for name, key in (("sigma", "conductivity"), ("rho", "density"))
        }
        edges = {}
        for axis in "xyz":
            centres = handle[f"axes/{axis}"][()]
            edges[f"{axis}_edges"] = np.append(centres, centres[-1] + 0.004) - 0.002
    np.savez(tmp_path / "bundle.npz", E=fields, frequency=297.2e6, **tissue, **edges)

    listed = _vop(site, "plugins", cwd=tmp_path)
    assert "npz-bundle" in listed.stdout
    stated = ("--phasor", "peak", "--time-sign", "+", "--reference", "forward power")
    points = ("--average-mass", "0")
    made = _vop(site, "model", "bundle.npz", *stated, *points, "-o", "a.h5", cwd=tmp_path)
    assert made.returncode == 0, made.stderr
    ours = _vop(site, "model", "export", *points, "-o", "b.h5", cwd=tmp_path)
    assert ours.returncode == 0, ours.stderr
    with h5py.File(tmp_path / "a.h5") as a, h5py.File(tmp_path / "b.h5") as b:
        assert np.allclose(a["local/packed"], b["local/packed"], rtol=1e-6, atol=1e-12)


def test_a_broken_plugin_is_reported_and_skipped(tmp_path: Path) -> None:
    info = tmp_path / "site" / "crooked-1.0.dist-info"
    info.mkdir(parents=True)
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: crooked\nVersion: 1.0\n")
    (info / "entry_points.txt").write_text(
        "[vop.readers]\ncrooked = crooked:READER\nmissing = not_there:READER\n"
        "[vop.exporters]\nhalf = crooked:HALF\n"
    )
    (tmp_path / "site" / "crooked.py").write_text("HALF = object()\nraise RuntimeError('out of order')\n")
    done = _vop(tmp_path / "site", "plugins", cwd=tmp_path)
    assert done.returncode == 0
    for words in ("crooked", "out of order", "not_there", "channel-hdf5", "mat5"):
        assert words in done.stdout
    write_channel_hdf5(tmp_path / "export")
    inspected = _vop(tmp_path / "site", "inspect", "export", cwd=tmp_path)
    assert "3 channels" in inspected.stdout, inspected.stderr
    named = _vop(tmp_path / "site", "inspect", "export", "--reader", "crooked", cwd=tmp_path)
    assert named.returncode == 2
    assert "out of order" in named.stderr
    assert "Traceback" not in named.stderr


def test_two_plugins_of_one_name_are_both_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    points = [
        EntryPoint("twice", "vop_readers.channel_hdf5:READER", "vop.readers"),
        EntryPoint("twice", "vop_exporters.hdf5:EXPORTER", "vop.readers"),
    ]
    monkeypatch.setattr(plugins, "entry_points", lambda group: points)
    plugins.installed.cache_clear()
    try:
        assert all("more than one" in str(p.fault) for p in plugins.installed(plugins.READERS))
    finally:
        plugins.installed.cache_clear()


def test_an_unknown_name_lists_what_is_installed() -> None:
    with pytest.raises(PluginError, match=r"mat6.*did you mean 'mat5'.*hdf5"):
        plugins.find(plugins.EXPORTERS, "mat6")


def test_the_core_imports_no_plugin() -> None:
    for file in (ROOT / "vop").rglob("*.py"):
        assert not re.search(r"^\s*(from|import) vop_(readers|exporters)", file.read_text(), re.MULTILINE), (
            file
        )
