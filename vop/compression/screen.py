"""Which matrices can be near a core: a pool of excitations, tables of SAR, and blocks of like rows."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor

import numpy as np

from vop.hermitian import U32, channels_from_width, identity, inner_weights, pack_excitations
from vop.kernels import clustering as kernels
from vop.kernels.lanes import LANES, lane_positions

#: Excitations in the pool; the tables take 4 bytes for each of them and each matrix, twice for a while.
_POOL = 64
_POOL_BYTES = 3 << 28
#: Matrices, cores among them, pairs and excitations that the pool is chosen from.
_SAMPLE, _CORES, _PAIRS, _OFFERS = 1024, 96, 2048, 512
#: Of the pool, at least so many are eigenvectors of single matrices.
_SPREAD = 16
#: Tables are made anew when fewer than this part of their rows are left.
_REFRESH = 0.7


class Screen:
    """Finds all Q of a set with λmin(B − Q) ≥ −bound, for any B of the set.

    For every excitation w of unit norm, such a Q has wᴴQw ≤ wᴴBw + bound. Tables of wᴴQw hold a pool of
    excitations, and their minima over blocks of like matrices.
    """

    def __init__(
        self, packed: np.ndarray, n: int, bound: float, order: np.ndarray, pool: ThreadPoolExecutor
    ) -> None:
        """``order``: rows by descending λmax; excitations are chosen from a sample along it."""
        self.packed, self.n, self.bound, self.pool = packed, n, bound, pool
        self.positions, self.one = lane_positions(n), identity(n)
        sample = packed[order[_evenly(len(order), _SAMPLE)]].astype(np.float64)
        count = max(1, min(_POOL, _POOL_BYTES // (8 * len(packed))))
        self.functionals = pack_excitations(_excitations(sample, bound, count, pool)).astype(np.float32)
        self.usual = (sample @ self.functionals.T.astype(np.float64)).mean(axis=0).astype(np.float32)
        self.usual += np.finfo(np.float32).tiny
        # n² + 3 roundings, each of at most 2⁻²⁴ of Σ|f||q| ≤ √2·‖Q‖_F ≤ √(2n)·λmax, on either side.
        norm = np.sqrt((np.square(sample[0]) @ inner_weights(n)).max())
        self.margin = 2.0 * (n * n + 3) * U32 * np.sqrt(2 * n) * norm
        table = packed @ self.functionals.T
        self.n_rows = len(packed)
        self.rows = np.arange(self.n_rows)
        segments = [(0, self.n_rows)]
        while len(segments) < 16 and self.n_rows > 1 << 12:
            middles = [kernels.halve(table, self.rows, a, b, LANES) for a, b in segments]
            segments = [s for (a, b), m in zip(segments, middles, strict=True) for s in ((a, m), (m, b))]
        list(pool.map(lambda s: kernels.order_by_halving(table, self.rows, s[0], s[1], LANES), segments))
        n_blocks = -(-self.n_rows // LANES)
        self.blocks = np.empty((n_blocks, table.shape[1] * LANES), np.float32)
        list(pool.map(lambda s: kernels.into_blocks(table, self.rows, s[0], s[1], self.blocks), segments))
        self.rows = np.concatenate([self.rows, np.full(n_blocks * LANES - self.n_rows, -1, np.int64)])
        self._minima()

    def refresh(self, alive: np.ndarray, n_alive: int) -> None:
        """Leave dead rows out of the tables, if they are many."""
        if n_alive > _REFRESH * self.n_rows:
            return
        self.n_rows = kernels.compact_blocks(self.blocks, self.rows, alive)
        n_blocks = -(-self.n_rows // LANES)
        self.blocks, self.rows = self.blocks[:n_blocks], self.rows[: n_blocks * LANES]
        self._minima()

    def _minima(self) -> None:
        self.upper = np.empty((-(-len(self.blocks) // LANES), self.blocks.shape[1]), np.float32)
        kernels.minima_of_blocks(self.blocks, self.upper)

    def candidates(self, cores: np.ndarray, alive: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """See :func:`vop.kernels.clustering.candidates_of`."""
        return kernels.candidates_of(
            cores,
            self.packed,
            self.n,
            self.bound,
            self.positions,
            self.one,
            self.functionals,
            self.usual,
            self.margin,
            self.blocks,
            self.upper,
            self.rows,
            alive,
        )


def _evenly(total: int, count: int) -> np.ndarray:
    """At most ``count`` places spread evenly over ``total``, the first among them."""
    return np.unique(np.linspace(0, total - 1, min(total, count)).astype(np.int64))


def _eigenvectors(packed: np.ndarray, pool: ThreadPoolExecutor) -> tuple[np.ndarray, np.ndarray]:
    """Ascending eigenvalues (R, n) of packed float64 rows, and eigenvectors (R, n, n) in rows."""
    n = channels_from_width(packed.shape[1])
    vectors, values = np.empty((len(packed), n, n), np.complex128), np.empty((len(packed), n))
    starts = range(0, len(packed), 256)
    list(
        pool.map(
            lambda a: kernels.eigenvectors(packed, n, a, min(a + 256, len(packed)), values, vectors), starts
        )
    )
    order = np.argsort(values, axis=1, kind="stable")
    return np.take_along_axis(values, order, 1), np.take_along_axis(vectors, order[:, :, None], 1)


def _excitations(sample: np.ndarray, bound: float, count: int, pool: ThreadPoolExecutor) -> np.ndarray:
    """``count`` excitations, (count, n), that tell apart most pairs of ``sample`` that are not near.

    sample : (S, n²), by descending λmax. A pair (B, Q) is told apart by w if wᴴ(Q − B)w > bound. Pairs
    that eigenvectors of single matrices do not tell apart offer the leading eigenvector of Q − B; the
    choice among those is greedy.
    """
    spread = _spread(_eigenvectors(sample, pool)[1], min(count, _SPREAD))
    values = sample @ pack_excitations(spread).T
    first, second = [np.zeros(0, np.int64)], [np.zeros(0, np.int64)]
    for core in _evenly(len(sample), _CORES):
        near = core + 1 + np.flatnonzero((values[core + 1 :] <= values[core] + bound).all(axis=1))
        if len(near):
            near = near[_evenly(len(near), _PAIRS // _CORES)]
            first.append(np.full(len(near), core))
            second.append(near)
    differences = sample[np.concatenate(second)] - sample[np.concatenate(first)]
    largest, vectors = _eigenvectors(differences, pool)
    hard = np.flatnonzero(largest[:, -1] > bound)
    if not len(hard) or count <= len(spread):
        return spread
    offered = vectors[hard, -1][_evenly(len(hard), _OFFERS)]
    told = differences[hard] @ pack_excitations(offered).T > bound
    return np.concatenate([offered[kernels.greedy_cover(told, count - len(spread))], spread])


def _spread(vectors: np.ndarray, count: int) -> np.ndarray:
    """``count`` of the two leading eigenvectors of each sampled matrix, far from one another.

    vectors : (S, n, n) complex, rows by ascending eigenvalue; the first matrix is of largest λmax.
    """
    leading = vectors[:, -2:][:, ::-1].swapaxes(0, 1).reshape(-1, vectors.shape[2])
    chosen = [0]
    nearest = np.zeros(len(leading))
    while len(chosen) < min(count, len(leading)):
        nearest = np.maximum(nearest, np.abs(leading @ leading[chosen[-1]].conj()) ** 2)
        chosen.append(int(np.argmin(nearest)))
    return leading[chosen]
