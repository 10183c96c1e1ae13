"""Hand-off files, read back by code that is not ours."""

from __future__ import annotations

import json
from pathlib import Path

import h5py
import numpy as np
import pytest
import scipy.io
from conftest import random_matrices

import vop
from vop.errors import OutputError
from vop.plugins import EXPORTERS, find, names


@pytest.fixture(scope="module")
def vop_set() -> vop.VopSet:
    """A set of a few VOPs at three channels."""
    model = vop.SarModel.from_matrices(random_matrices(np.random.default_rng(3), 60, 3))
    return vop.compress(model, overestimation=0.1)


@pytest.mark.parametrize("name", names(EXPORTERS))
def test_every_exporter_reads_back_to_the_same_bits(name: str, vop_set: vop.VopSet, tmp_path: Path) -> None:
    path = tmp_path / f"out{find(EXPORTERS, name).suffix}"
    vop.export(vop_set, path, format=name)
    assert np.array_equal(find(EXPORTERS, name).read_matrices(path), vop_set.matrices)
    again = tmp_path / f"again{find(EXPORTERS, name).suffix}"
    vop.export(vop_set, again, format=name)
    assert path.read_bytes() == again.read_bytes()


def test_mat_file_is_right_by_its_own_self_test(vop_set: vop.VopSet, tmp_path: Path) -> None:
    # Reader: scipy.io.loadmat; the consumer's own formula, written as pulse-design code would.
    vop.export(vop_set, tmp_path / "v.mat", format="mat5")
    mat = scipy.io.loadmat(tmp_path / "v.mat")
    q, w = mat["vop"], mat["selftest_w"]
    found = [
        max((w[:, m].conj() @ q[:, :, k] @ w[:, m]).real for k in range(q.shape[2]))
        for m in range(w.shape[1])
    ]
    assert np.allclose(found, mat["selftest_sar"][:, 0], rtol=1e-12)
    conjugated = [
        max((w[:, m] @ q[:, :, k] @ w[:, m].conj()).real for k in range(q.shape[2]))
        for m in range(w.shape[1])
    ]
    assert not np.allclose(conjugated, mat["selftest_sar"][:, 0], rtol=1e-3)
    assert "review by qualified people" in mat["caution"][0]
    assert "not its conjugate" in mat["holds"][0]
    assert json.loads(mat["domain"][0])["coil"] == "not stated"


def test_mat_file_of_a_single_vop_keeps_its_shape(tmp_path: Path) -> None:
    q = random_matrices(np.random.default_rng(0), 1, 3)
    one = vop.compress(vop.SarModel.from_matrices(q), overestimation=0.5)
    assert len(one) == 1
    vop.export(one, tmp_path / "v.mat", format="mat5")
    assert find(EXPORTERS, "mat5").read_matrices(tmp_path / "v.mat").shape == (1, 3, 3)


def test_hdf5_file_follows_its_written_schema(vop_set: vop.VopSet, tmp_path: Path) -> None:
    # Reader: h5py and the schema text alone.
    vop.export(vop_set, tmp_path / "v.h5", format="hdf5")
    with h5py.File(tmp_path / "v.h5") as handle:
        packed = handle["vops/packed"][()].astype(float)
        assert "real parts of the strict upper triangle, row by row" in handle.attrs["schema"]
        assert json.loads(handle.attrs["metadata"])["reference"]["quantity"] == "forward power"
    n, m = 3, 3
    q = np.zeros((len(packed), n, n), complex)
    at = 0
    for i in range(n):
        q[:, i, i] = packed[:, i]
        for j in range(i + 1, n):
            q[:, i, j] = packed[:, n + at] + 1j * packed[:, n + m + at]
            q[:, j, i] = q[:, i, j].conj()
            at += 1
    assert np.array_equal(q, vop_set.matrices)


def test_an_exporter_that_loses_a_bit_leaves_nothing(
    vop_set: vop.VopSet, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    exporter = find(EXPORTERS, "mat5")
    right = exporter.read_matrices
    monkeypatch.setattr(type(exporter), "read_matrices", lambda self, path: right(path) * (1 + 1e-15))
    with pytest.raises(OutputError, match="does not read back"):
        vop.export(vop_set, tmp_path / "v.mat", format="mat5")
    assert list(tmp_path.iterdir()) == []
