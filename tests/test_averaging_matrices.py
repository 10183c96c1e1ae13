"""Matrices against dense averages by numpy, for any number of channels and any place of samples."""

from __future__ import annotations

import numba
import numpy as np
import pytest
from test_build import ArraySource, _lumpy

import vop
from vop.fields import SAMPLES


def _overlap(edges: np.ndarray, low: float, high: float) -> np.ndarray:
    return np.clip(np.minimum(edges[1:], high) - np.maximum(edges[:-1], low), 0, None)


@pytest.mark.parametrize("combine", ["outer", "field"])
@pytest.mark.parametrize("centring", ["cell", "node", "edge"])
@pytest.mark.parametrize("n", [1, 2, 3, 5, 8])
def test_every_matrix_is_the_average_over_its_box(n: int, centring: str, combine: str) -> None:
    grid, tissue, e = _lumpy(n, centring, seed=n)
    model = vop.build_sar_model(ArraySource(grid, tissue, e, centring), 0.0008, combine=combine)
    assert model.cubes is not None
    nz, ny, nx = grid.shape
    density = np.zeros((n, n, nz, ny, nx), complex)
    for c, offsets in enumerate(SAMPLES[centring]):
        parts = [e[:, c, k : k + nz, j : j + ny, i : i + nx].astype(complex) for k, j, i in offsets]
        if combine == "field":
            parts = [np.mean(parts, axis=0)]
        density += np.mean([p.conj()[:, None] * p[None] for p in parts], axis=0)
    density *= 0.5 * tissue.conductivity_s_m.astype(float)
    ez, ey, ex = grid.edges_m
    rng = np.random.default_rng(0)
    for r in rng.choice(len(model), 60, replace=False):
        box = model.cubes.box_m[r]
        parts = _overlap(ez, *box[4:]), _overlap(ey, *box[2:4]), _overlap(ex, *box[:2])
        wanted = np.einsum("abkji,k,j,i->ab", density, *parts, optimize=True) / model.cubes.mass_kg[r]
        assert np.allclose(model.matrices(r), wanted, rtol=0, atol=3e-7 * np.abs(wanted).max())
    volumes = np.diff(ez)[:, None, None] * np.diff(ey)[:, None] * np.diff(ex)
    power = (density * volumes).sum(axis=(2, 3, 4))
    found = model.global_matrices["absorbed power"]
    assert np.allclose(found, power, rtol=0, atol=1e-6 * np.abs(power).max())  # means are held as complex64


def test_the_number_of_threads_changes_no_bit() -> None:
    if numba.config.NUMBA_NUM_THREADS < 2:
        pytest.skip("needs two threads")
    source = ArraySource(*_lumpy(8))
    before = numba.get_num_threads()
    try:
        models = []
        for threads in (1, 2):
            numba.set_num_threads(threads)
            models.append(vop.build_sar_model(source, 0.0008))
    finally:
        numba.set_num_threads(before)
    assert np.array_equal(*(m.packed for m in models))
    assert models[0].digest() == models[1].digest()


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("centring", ["cell", "edge"])
def test_a_field_that_is_not_finite_matters_only_where_tissue_touches_it(value: float, centring: str) -> None:
    grid, tissue, e = _lumpy(2, centring)
    wanted = vop.build_sar_model(ArraySource(grid, tissue, e, centring), 0.0008).packed
    e[1, 0, 0, 0, 0] = value  # a corner, far from tissue
    found = vop.build_sar_model(ArraySource(grid, tissue, e, centring), 0.0008).packed
    assert np.array_equal(wanted, found)
    e[1, 2, 6, 5, 4] = complex(0, value)
    for combine in ("outer", "field"):
        with pytest.raises(vop.VopError, match=r"channel 2 .* at 1 samples in tissue.*\[6, 5, 4\]"):
            vop.build_sar_model(ArraySource(grid, tissue, e, centring), 0.0008, combine=combine)


def test_an_island_far_away_does_not_change_the_matrices_of_the_body() -> None:
    # Its cubes are as long as the grid, so that tiles and windows grow; the body's boxes stay what they were.
    grid, tissue, e = _lumpy(3)
    plain = vop.build_sar_model(ArraySource(grid, tissue, e), 0.0008)
    rho, sigma = tissue.density_kg_m3.copy(), tissue.conductivity_s_m.copy()
    assert rho[0, 0, 0] == 0
    rho[0, 0, 0], sigma[0, 0, 0] = 1000.0, 1.0
    from vop.fields import Tissue

    island = vop.build_sar_model(ArraySource(grid, Tissue(sigma, rho), e), 0.0008)
    assert plain.cubes is not None
    assert island.cubes is not None
    rows = {
        (int(v), int(k)): r
        for r, (v, k) in enumerate(zip(island.cubes.voxel, island.cubes.kind, strict=True))
    }
    same = 0
    for r, (v, k) in enumerate(zip(plain.cubes.voxel, plain.cubes.kind, strict=True)):
        there = rows.get((int(v), int(k)))
        if there is not None and np.allclose(island.cubes.box_m[there], plain.cubes.box_m[r], rtol=1e-12):
            assert np.allclose(island.packed[there], plain.packed[r], rtol=3e-7, atol=1e-6)
            same += 1
    assert same > 0.8 * len(plain)
    assert 0 in island.cubes.voxel
