"""Clustering-free compression: few cores whose mixtures, raised by the bound, dominate all matrices.

Lee, Gebhardt, Wald & Adalsteinsson, Magn Reson Med 2012;67:1566-1578: keep cores V_j such that every
Q_v ⪯ Σ c_j V_j + ε'1 for some c in the simplex; the VOPs are V_j + ε'1. By minimax that fails for a
matrix exactly if some covariance X ⪰ 0, a witness, has tr(Q_v X) > max_j tr(V_j X) + ε' tr X.

So cores have to *hit* every covariance X: some tr(V_j X) ≥ max_v tr(Q_v X) − ε' tr X. Cores are chosen to
hit a pool of covariances; then matrices are looked for that no mixture dominates, and the witnesses
against them join the pool, until there are none.
"""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor

import numba
import numpy as np

from vop.compression.bound import as_rows
from vop.compression.contract import CompressionResult, Problem, TooManyVops
from vop.hermitian import identity, inner_weights
from vop.kernels import clustering_free_cover as cover
from vop.kernels import clustering_free_tables as tables
from vop.kernels.clustering import order_by_halving
from vop.kernels.lanes import LANES, lane_positions
from vop.progress import Progress

#: Matrices whose leading eigenvectors begin the pool; functionals that put like matrices together.
_SAMPLE, _SORTING = 400, 16
#: Targets of one chunk, cuts that each chunk begins with and keeps, witnesses that join the pool at once.
_CHUNK, _FIRST_CUTS, _MOST_CUTS, _JOIN = 1024, 256, 1024, 200


def run(problem: Problem, progress: Progress) -> CompressionResult:
    """Choose cores for ``problem``; see the module and :class:`~.contract.Method`."""
    with ThreadPoolExecutor(numba.get_num_threads()) as threads:
        return _Search(problem, progress, threads).run()


class _Search:
    def __init__(self, problem: Problem, progress: Progress, threads: ThreadPoolExecutor) -> None:
        self.problem, self.progress, self.threads = problem, progress, threads
        self.packed, self.n = as_rows(problem.packed), problem.n
        self.gain, self.one = inner_weights(self.n), identity(self.n)
        self.positions = lane_positions(self.n)
        self.functionals = np.empty((0, self.n**2))
        self.best, self.best_row = np.empty(0, np.float32), np.empty(0, np.int64)

    def run(self) -> CompressionResult:
        sample = np.unique(np.linspace(0, len(self.packed) - 1, _SAMPLE).astype(np.int64))
        self._join(self._leading(sample))
        cores = np.zeros(0, np.int64)
        open_rows = self._order()
        n_rows = len(open_rows)
        while len(open_rows):
            cores = self._hit(cores)
            limit = self.problem.limit
            if limit is not None and len(cores) > limit:
                raise TooManyVops
            open_rows, witnesses, excess = self._uncovered(cores, open_rows)
            self.progress("clustering-free", n_rows - len(open_rows), n_rows)
            if len(open_rows):
                deepest = np.argsort(-excess, kind="stable")[:_JOIN]
                if not excess[deepest[0]] > 0:
                    cores = np.append(cores, open_rows[deepest[0]])
                self._join(witnesses[deepest])
        delivered = self.packed[cores] + self.problem.bound * self.one
        return CompressionResult(delivered, cores)

    def _leading(self, rows: np.ndarray) -> np.ndarray:
        out = np.empty((len(rows), self.n**2))
        cover.leading_functionals(self.packed, rows, self.n, self.gain, out)
        return out

    def _order(self) -> np.ndarray:
        """All rows, like ones together."""
        count = min(_SORTING, len(self.functionals))
        blocks = tables.in_blocks(self.functionals[:: len(self.functionals) // count][:count])
        table = np.empty((len(self.packed), count), np.float32)
        tables.fill_table(self.packed, np.arange(len(self.packed)), blocks, count, table)
        order = np.arange(len(table))
        order_by_halving(table, order, 0, len(table), LANES)
        return order

    def _join(self, functionals: np.ndarray) -> None:
        """Let covariances join the pool."""
        functionals = functionals / (functionals @ self.one)[:, None]
        blocks = tables.in_blocks(functionals)

        def work(first: int) -> tuple[np.ndarray, np.ndarray]:
            best, row = np.empty(blocks.shape[0] * tables.WIDE, np.float32), np.empty(0, np.int64)
            row = np.empty(len(best), np.int64)
            last = min(first + (1 << 13), len(self.packed))
            tables.largest_values(self.packed, first, last, blocks, best, row)
            return best, row

        parts = list(self.threads.map(work, range(0, len(self.packed), 1 << 13)))
        best = np.array([p[0] for p in parts])
        chunk = best.argmax(axis=0)[: len(functionals)]
        at = np.arange(len(functionals))
        self.best = np.concatenate([self.best, best[chunk, at]])
        self.best_row = np.concatenate([self.best_row, np.array([p[1] for p in parts])[chunk, at]])
        self.functionals = np.concatenate([self.functionals, functionals])

    def _hit(self, cores: np.ndarray) -> np.ndarray:
        """``cores`` and more, until they hit every covariance of the pool; the farthest first."""
        chosen = list(cores)
        blocks = tables.in_blocks(self.functionals)
        count = len(self.functionals)
        candidates, place = np.unique(self.best_row, return_inverse=True)
        table = np.empty((len(candidates), count), np.float32)
        tables.fill_table(self.packed, candidates, blocks, count, table)
        values = np.full(count, -np.inf, np.float32)
        if len(cores):
            own = np.empty((len(cores), count), np.float32)
            tables.fill_table(self.packed, cores, blocks, count, own)
            values = own.max(axis=0)
        while True:
            gap = self.best - values
            worst = int(gap.argmax())
            if not gap[worst] > self.problem.bound and chosen:
                return np.array(chosen, dtype=np.int64)
            chosen.append(self.best_row[worst])
            values = np.maximum(values, table[place[worst]])

    def _uncovered(self, cores: np.ndarray, rows: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Those of ``rows`` that no mixture covers, a witness against each, and by how much it exceeds."""
        scale = self.problem.worst
        columns_t = np.ascontiguousarray(self.packed[cores].astype(np.float64).T) / scale
        cuts = np.ascontiguousarray(self.functionals[-_FIRST_CUTS:])
        first = np.empty((len(cuts), len(cores)))
        for cut, out in zip(cuts, first, strict=True):
            cover.values_on(columns_t, cut, len(cores), out)

        def work(begin: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
            part = rows[begin : begin + _CHUNK]
            _, which, witness, excess, _ = cover.examine(
                self.packed,
                part,
                columns_t,
                scale,
                self.problem.bound / scale,
                0.5 * self.problem.tolerance / scale,
                self.n,
                self.gain,
                self.one,
                self.positions,
                cuts,
                first,
                _MOST_CUTS,
                len(part),
            )
            return part[which], witness, excess

        parts = list(self.threads.map(work, range(0, len(rows), _CHUNK)))
        found = [np.concatenate(column) for column in zip(*parts, strict=True)]
        return found[0], found[1], found[2]
