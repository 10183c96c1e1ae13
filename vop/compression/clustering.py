"""Clustering of local matrices around cores of largest SAR.

Eichfelder & Gebhardt, Magn Reson Med 2011;66:1468-1476: among the matrices not yet in a cluster, that
of largest λmax is the core B, and Z = 0. The others follow in descending order of λmin(B − Q). Each is
a member if Z' = Z + (Q − B − Z)₊, the positive part, has λmax(Z') ≤ ε; Z becomes Z'. The first that is
not closes the cluster. The VOP is B + Z.

What is done for speed changes no decision: a matrix with λmin(B − Q) < −ε cannot be a member, because
λmax(Z') ≥ λmax(Q − B); so only those above are looked for, behind screens that reject no other. Several
clusters grow at once, as if alone; they are closed in order, and one that had counted on a matrix that
an earlier cluster took grows again without it. The result is that of one after the other.
"""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from typing import NamedTuple

import numba
import numpy as np

from vop.compression.bound import as_rows
from vop.compression.contract import CompressionResult, Problem, TooManyVops
from vop.compression.screen import Screen
from vop.kernels import clustering as kernels
from vop.kernels.lanes import lane_positions
from vop.progress import Progress

#: Most clusters that grow at once, and most candidates that they may have together.
_MOST_AT_ONCE = 64
_MOST_CANDIDATES = 1 << 22
#: The published method closes a cluster at the first refusal. To look further costs little and gives
#: fewer clusters; all that is accepted is accepted by the same rule.
_PATIENCE = 32


def run(problem: Problem, progress: Progress) -> CompressionResult:
    """Cluster the matrices of ``problem``; see the module and :class:`~.contract.Method`."""
    with ThreadPoolExecutor(numba.get_num_threads()) as pool:
        return _Clustering(problem, progress, pool).run()


class _Open(NamedTuple):
    """Clusters that grow: cores, candidates (offsets, found, keys), and how far they came."""

    cores: np.ndarray
    offsets: np.ndarray
    found: np.ndarray
    keys: np.ndarray
    marks: np.ndarray
    known: np.ndarray
    dirty: np.ndarray
    growth: np.ndarray


def _joined(parts: list[_Open]) -> _Open:
    starts = np.cumsum([0, *(len(p.found) for p in parts)])
    offsets = [p.offsets[1:] + start for p, start in zip(parts, starts[:-1], strict=True)]
    columns = zip(*(p._replace(offsets=o) for p, o in zip(parts, offsets, strict=True)), strict=True)
    joined = _Open(*(np.concatenate(column) for column in columns))
    return joined._replace(offsets=np.concatenate([[0], joined.offsets]))


class _Clustering:
    def __init__(self, problem: Problem, progress: Progress, pool: ThreadPoolExecutor) -> None:
        self.problem, self.progress, self.pool = problem, progress, pool
        self.threads = numba.get_num_threads()
        self.packed = as_rows(problem.packed)
        self.n, self.n_rows = problem.n, len(self.packed)
        self.alive = np.ones(self.n_rows, np.bool_)

    def run(self) -> CompressionResult:
        order = self._order()
        self.screen = Screen(self.packed, self.n, self.problem.bound, order, self.pool)
        cores, delivered = self._resumed()
        count = sum(map(len, cores))
        current = self._fresh(np.zeros(0, np.int64))
        at, at_once, left = 0, 1, int(np.count_nonzero(self.alive))
        while left:
            self.screen.refresh(self.alive, left)
            fresh, at = kernels.next_alive(order, at, self.alive, at_once - len(current.cores))
            current = self._grown(current, fresh)
            first, closed = kernels.commit(
                *current[:3], current.marks, current.known, current.dirty, self.alive
            )
            cores.append(current.cores[closed])
            delivered.append(self.packed[cores[-1]] + current.growth[closed])
            count += len(cores[-1])
            if self.problem.limit is not None and count > self.problem.limit:
                raise TooManyVops
            left = int(np.count_nonzero(self.alive))
            if self.problem.checkpoint.due():
                self._save(cores, delivered)
            self.progress("clustering", self.n_rows - left, self.n_rows)
            most = min(_MOST_AT_ONCE, _MOST_CANDIDATES * len(current.cores) // max(1, len(current.found)))
            at_once = min(max(2 * self.threads, min(most, first + first // 4 + 1)), _MOST_AT_ONCE)
            current = _Open(*kernels.still_open(first, *current, self.alive))
        return CompressionResult(np.concatenate(delivered), np.concatenate(cores), {"patience": _PATIENCE})

    def _resumed(self) -> tuple[list[np.ndarray], list[np.ndarray]]:
        """Cores and delivered matrices of the clusters that an earlier run closed."""
        state = self.problem.checkpoint.load()
        if state is None:
            return [], []
        self.alive = state["alive"]
        return [state["cores"]], [state["delivered"]]

    def _save(self, cores: list[np.ndarray], delivered: list[np.ndarray]) -> None:
        self.problem.checkpoint.save(
            {"alive": self.alive, "cores": np.concatenate(cores), "delivered": np.concatenate(delivered)}
        )

    def _order(self) -> np.ndarray:
        """Rows by descending λmax, ties by row."""
        largest, positions, chunk = np.empty(self.n_rows), lane_positions(self.n), 1 << 12

        def work(first: int) -> None:
            last = min(first + chunk, self.n_rows)
            kernels.largest_eigenvalues(self.packed, self.n, positions, first, last, largest)

        list(self.pool.map(work, range(0, self.n_rows, chunk)))
        return np.argsort(-largest, kind="stable")

    def _fresh(self, cores: np.ndarray) -> _Open:
        """Clusters grown around ``cores`` as if each were alone."""
        offsets, found, keys = self.screen.candidates(cores, self.alive)
        n_cores = len(cores)
        part = _Open(
            cores,
            offsets,
            found,
            keys,
            marks=np.zeros(len(found), np.int8),
            known=np.zeros(n_cores, np.int64),
            dirty=np.ones(n_cores, np.bool_),
            growth=np.empty((n_cores, self.n**2)),
        )
        self._grow(part, np.arange(n_cores))
        return part

    def _grow(self, part: _Open, chosen: np.ndarray) -> None:
        problem = self.problem
        tolerance = 0.25 * problem.tolerance
        kernels.grow(*part, chosen, self.packed, self.n, problem.bound, tolerance, _PATIENCE)

    def _grown(self, current: _Open, fresh: np.ndarray) -> _Open:
        """``current``, grown again where an earlier cluster took a candidate, and clusters at ``fresh``."""
        again = np.flatnonzero(current.dirty)

        def work(share: int) -> _Open:
            self._grow(current, again[share :: self.threads])
            first, last = (len(fresh) * k // self.threads for k in (share, share + 1))
            return self._fresh(fresh[first:last])

        others = [self.pool.submit(work, share) for share in range(1, self.threads)]
        return _joined([current, work(0), *(other.result() for other in others)])
