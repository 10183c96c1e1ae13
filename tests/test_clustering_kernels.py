"""Kernels of clustering against numpy's LAPACK: eigenvalues, positive parts, lanes, screens."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
from conftest import random_matrices
from proof_cases import smooth_model

from vop.compression.screen import Screen
from vop.hermitian import pack
from vop.kernels import clustering as kernels
from vop.kernels.cholesky import is_positive
from vop.kernels.eigen import add_positive_part, back_transform, eigensystem
from vop.kernels.lanes import (
    LANES,
    lane_buffer_size,
    lane_positions,
    least_eigenvalues,
    positive_lanes,
    subtract_rows,
)

SIZES = [1, 2, 3, 4, 8, 16, 31]


def _awkward(n: int) -> np.ndarray:
    """Hermitian matrices (16, n, n): random, of low rank, multiples of 1, diagonal, nearly degenerate."""
    rng = np.random.default_rng(n)
    a = rng.normal(size=(16, n, n)) + 1j * rng.normal(size=(16, n, n))
    a = a + a.conj().swapaxes(1, 2)
    v = rng.normal(size=(2, n)) + 1j * rng.normal(size=(2, n))
    a[0] = np.outer(v[0], v[0].conj())
    a[1] = -a[0]
    a[2], a[3], a[4] = 0.0, np.eye(n), -np.eye(n)
    a[5] = np.diag(rng.normal(size=n))
    a[6] = np.outer(v[0], v[0].conj()) - np.outer(v[1], v[1].conj())
    q = np.linalg.qr(rng.normal(size=(n, n)) + 1j * rng.normal(size=(n, n)))[0]
    a[7] = (q * (1 + 1e-9 * np.arange(n))) @ q.conj().T
    a[8] = (q * 10.0 ** -np.arange(n)) @ q.conj().T
    a[9] = 1e-30 * a[10]
    a[11] = 1e30 * a[12]
    return 0.5 * (a + a.conj().swapaxes(1, 2))


def _lanes(matrices: np.ndarray, dtype: type) -> np.ndarray:
    n = matrices.shape[-1]
    h = np.zeros(lane_buffer_size(n), dtype)
    h[lane_positions(n)[:, None] + np.arange(LANES)] = pack(matrices).T
    return h


@pytest.mark.parametrize("n", SIZES)
def test_eigenvalues_and_eigenvectors_agree_with_lapack(n: int) -> None:
    for a in _awkward(n):
        h, e, z = a.copy(), np.empty(n, complex), np.empty((n, n))
        d, f, tau, v = np.empty(n), np.empty(n), np.empty(n), np.empty((n, n), complex)
        eigensystem(h, n, d, e, f, tau, z)
        for k in range(n):
            back_transform(h, n, e, tau, z[k], v[k])
        size = np.abs(a).max()
        np.testing.assert_allclose(np.sort(d), np.linalg.eigvalsh(a), rtol=0, atol=1e-14 * n * size)
        np.testing.assert_allclose(v.conj() @ v.T, np.eye(n), atol=1e-14 * n)
        np.testing.assert_allclose((v.T * d) @ v.conj(), a, rtol=0, atol=1e-14 * n * size)


@pytest.mark.parametrize("n", SIZES)
def test_positive_parts_agree_with_lapack(n: int) -> None:
    for a in _awkward(n):
        z = np.zeros((n, n), complex)
        real, vectors, e, v = np.empty((7, n)), np.empty((n, n)), np.empty(n, complex), np.empty(n, complex)
        assert add_positive_part(a.copy(), n, 0.0, z, real, vectors, e, v)
        values, basis = np.linalg.eigh(a)
        wanted = (basis * values.clip(min=0)) @ basis.conj().T
        np.testing.assert_allclose(np.triu(z), np.triu(wanted), rtol=0, atol=1e-10 * np.abs(a).max())


@pytest.mark.parametrize("n", SIZES)
def test_least_eigenvalues_of_sixteen_matrices_abreast_agree_with_lapack(n: int) -> None:
    a, out = _awkward(n), np.empty(LANES)
    least_eigenvalues(_lanes(a, np.float64), n, out)
    wanted = np.linalg.eigvalsh(a)
    error, size = out - wanted[:, 0], np.abs(wanted).max(axis=1)
    assert (error <= 1e-14 * n * size).all()
    # From below the iteration may stop a little early where many eigenvalues crowd at the low end.
    crowded = np.arange(LANES) == 8
    assert (-error <= np.where(crowded, 1e-12, 1e-14 * n) * size).all()


@pytest.mark.parametrize("n", SIZES)
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_elimination_tells_definite_from_indefinite_matrices_as_their_eigenvalues_do(
    n: int, dtype: type
) -> None:
    rng = np.random.default_rng(n)
    a = random_matrices(rng, LANES, n, rank=n)
    least = np.linalg.eigvalsh(a)
    # Half of them just above, half just below semidefinite.
    gap = 1e-4 * least[:, -1] * np.where(np.arange(LANES) % 2, 1, -1)
    a -= (least[:, 0] - gap)[:, None, None] * np.eye(n)
    mask = positive_lanes(_lanes(a, dtype), n)
    assert [(mask >> lane) & 1 for lane in range(LANES)] == [lane % 2 for lane in range(LANES)]
    assert [is_positive(m.copy(), n) for m in a] == [lane % 2 == 1 for lane in range(LANES)]


@pytest.mark.parametrize("n", [1, 3, 8])
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_rows_go_into_the_lanes_that_positions_name(n: int, dtype: type) -> None:
    rows = pack(random_matrices(np.random.default_rng(0), 30, n)).astype(np.float32)
    rows.flags.writeable = False
    index = np.random.default_rng(1).integers(0, 30, LANES)
    top = np.random.default_rng(2).normal(size=n * n).astype(dtype)
    h = np.zeros(lane_buffer_size(n), dtype)
    subtract_rows_(h, lane_positions(n), top, rows, index)
    np.testing.assert_array_equal(
        h[lane_positions(n)[:, None] + np.arange(LANES)].T, top - rows[index].astype(dtype)
    )


def subtract_rows_(*args) -> None:
    import numba

    numba.njit(lambda h, p, t, r, i: subtract_rows(h, p, t, r, i))(*args)


@pytest.mark.parametrize("n", [1, 2, 5, 8])
@pytest.mark.parametrize("part", [0.3, 0.05, 0.005])
def test_screens_find_exactly_the_matrices_whose_least_eigenvalue_below_a_core_is_within_the_bound(
    n: int, part: float
) -> None:
    # Reference: every eigenvalue by numpy.linalg.
    model = smooth_model(n, n, 1500, harmonics=6)
    packed, q = model.packed.view(), model.matrices()
    packed.flags.writeable = False
    largest = np.linalg.eigvalsh(q)[:, -1]
    order = np.argsort(-largest, kind="stable")
    bound = part * largest.max()
    screen = Screen(packed, n, bound, order, ThreadPoolExecutor(2))
    alive = np.random.default_rng(0).random(len(q)) < 0.6
    for fewer in (False, True):
        if fewer:
            alive &= np.arange(len(q)) % 4 == 0
            screen.refresh(alive, int(alive.sum()))
        cores = order[::150].astype(np.int64)
        offsets, found, keys = screen.candidates(cores, alive)
        for c, core in enumerate(cores):
            rows = np.flatnonzero(alive)
            least = np.linalg.eigvalsh(q[core] - q[rows])[:, 0]
            part_found, part_keys = found[offsets[c] : offsets[c + 1]], keys[offsets[c] : offsets[c + 1]]
            sure = np.abs(least + bound) > 1e-12 * largest.max()
            assert set(part_found) >= set(rows[sure & (least >= -bound)])
            assert set(part_found).isdisjoint(rows[sure & (least < -bound)])
            assert (np.diff(part_keys) <= 0).all()
            np.testing.assert_allclose(
                part_keys, np.linalg.eigvalsh(q[core] - q[part_found])[:, 0], atol=1e-13 * largest.max()
            )


def test_tables_keep_every_row_once_and_blocks_hold_their_minima() -> None:
    rng = np.random.default_rng(3)
    table = rng.normal(size=(1003, 5)).astype(np.float32)
    order = np.arange(1003)
    kernels.order_by_halving(table, order, 0, 1003, LANES)
    np.testing.assert_array_equal(np.sort(order), np.arange(1003))
    blocks = np.empty((63, 5 * LANES), np.float32)
    kernels.into_blocks(table, order, 0, 1003, blocks)
    padded = np.full((1008, 5), np.inf, np.float32)
    padded[:1003] = table[order]
    np.testing.assert_array_equal(blocks.reshape(63, 5, LANES).swapaxes(1, 2).reshape(1008, 5), padded)
    upper = np.empty((4, 5 * LANES), np.float32)
    kernels.minima_of_blocks(blocks, upper)
    minima = upper.reshape(4, 5, LANES).swapaxes(1, 2).reshape(64, 5)
    np.testing.assert_array_equal(minima[:63], padded.reshape(63, LANES, 5).min(axis=1))
    assert np.isinf(minima[63]).all()
    # Like rows lie together: a block spans far less than the table.
    spread = padded[: 62 * LANES].reshape(62, LANES, 5)
    assert np.ptp(spread, axis=1).mean() < 0.6 * np.ptp(table, axis=0).mean()
