"""The attack: sweeps over drawn excitations and covariances, then local maximisation."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from vop.attack.draw import Draw
from vop.attack.evaluate import SINGLE, Evaluator, functionals_of
from vop.attack.result import AttackResult
from vop.errors import InputError
from vop.hermitian import inner_weights, unpack
from vop.kernels.attack_ascent import ascend
from vop.parallel import map_chunks
from vop.progress import Progress, silent
from vop.sarmodel import SarModel
from vop.vopset import VopSet

_BATCH = 1024
#: Closest calls of a batch that double precision looks at.
_CLOSEST = 4
#: Closest calls kept, and local maxima confirmed against the whole model.
_KEPT = 64
#: One covariance, and one local maximisation, for so many excitations; and the maximisation's steps.
_PER_COVARIANCE, _PER_ASCENT, _STEPS = 8, 64, 60
_ASCENTS_AT_ONCE = 64


def attack(
    vop_set: VopSet,
    model: SarModel,
    n_excitations: int = 1_000_000,
    *,
    seed: int = 0,
    progress: Progress = silent,
) -> AttackResult:
    """Search for excitations and covariances that break ``vop_set`` against ``model``.

    Excitations are, in turn: random directions; equal amplitudes with random phases; eigenvectors of
    matrices and VOPs; few channels; eigenvectors of a matrix less the VOP that is largest at its peak;
    phase steps around the array with errors. Covariances average 2 to n of these. The closest calls,
    and the leading eigenvectors of matrices spread over the model, start local maximisations of
    SAR(model)/SAR(set) (:mod:`vop.kernels.attack_ascent`). Single precision only proposes; every
    figure in the result is double precision, and a bound counts as broken only beyond all rounding.

    Parameters
    ----------
    n_excitations : how many to draw; an eighth as many covariances and a 64th as many local
        maximisations come on top.
    seed : of everything random.

    Raises
    ------
    InputError
        Where set and model differ in channels or reference, or ``n_excitations`` < 1.
    """
    theirs, ours = vop_set.metadata, model.metadata
    if theirs.channel_names != ours.channel_names or theirs.reference != ours.reference:
        raise InputError("set and model differ in channels or in reference; they do not belong together")
    if n_excitations < 1:
        raise InputError(f"n_excitations is {n_excitations}; at least 1 is needed")
    return _Attack(vop_set, model, seed, progress).run(n_excitations)


class _Calls:
    """The closest calls so far, in double precision, smallest ratio first."""

    def __init__(self) -> None:
        self.items: list[tuple[float, int, np.ndarray]] = []

    def add(self, ratio: float, row: int, factor: np.ndarray) -> None:
        if len(self.items) < _KEPT or ratio < self.items[-1][0]:
            at = sum(item[0] <= ratio for item in self.items)
            self.items.insert(at, (ratio, row, factor))
            del self.items[_KEPT:]


class _Attack:
    def __init__(self, vop_set: VopSet, model: SarModel, seed: int, progress: Progress) -> None:
        self.set, self.model, self.progress = vop_set, model, progress
        self.n = vop_set.n_channels
        self.draw, self.evaluate = Draw(vop_set, model, seed), Evaluator(vop_set, model)
        nothing = np.zeros((self.n, 1), dtype=np.complex128)
        self.largest, self.use = (-np.inf, nothing), (-np.inf, nothing)
        self.n_ascents = 0

    def run(self, n_excitations: int) -> AttackResult:
        single, averaged = _Calls(), _Calls()
        self._sweep("attack: excitations", n_excitations, self.draw.excitations, single)
        n_ascents = max(_KEPT, n_excitations // _PER_ASCENT)
        self._ascend(n_ascents, 1, single)
        n_covariances = 0
        if self.n > 1:
            n_covariances = max(1, n_excitations // _PER_COVARIANCE)
            self._sweep("attack: covariances", n_covariances, self.draw.covariances, averaged)
            self._ascend(n_ascents // 4, self.n, averaged)
        closest = single.items[0]
        averaged.add(*closest)
        closest_averaged = averaged.items[0]
        return AttackResult(
            n_excitations=n_excitations,
            n_covariances=n_covariances,
            n_ascents=self.n_ascents,
            smallest_ratio=closest[0],
            smallest_excitation=closest[2][:, 0],
            smallest_ratio_covariance=closest_averaged[0],
            smallest_covariance=closest_averaged[2] @ closest_averaged[2].conj().T,
            largest_ratio=self.largest[0],
            largest_excitation=self.largest[1][:, 0],
            largest_bound_use=self.use[0],
            largest_bound_excitation=self.use[1][:, 0],
            underestimated=self.evaluate.underestimates(closest[2])
            or self.evaluate.underestimates(closest_averaged[2]),
            overestimated=self.evaluate.overestimates(self.use[1]),
        )

    def _sweep(self, label: str, total: int, draw: Callable[[int, int], np.ndarray], calls: _Calls) -> None:
        for batch, first in enumerate(range(0, total, _BATCH)):
            factors = draw(batch, min(_BATCH, total - first))
            ratio, use = self.evaluate.single(functionals_of(factors))
            order = np.argsort(ratio, kind="stable")
            suspect = np.flatnonzero((ratio < 1 + SINGLE) | (use > 1 - SINGLE))
            chosen = np.unique([*order[:_CLOSEST], order[-1], int(use.argmax()), *suspect])
            self._confirm(factors[chosen], calls)
            self.progress(label, first + len(factors), total)

    def _confirm(self, factors: np.ndarray, calls: _Calls) -> None:
        """Evaluate factors (M, n, r) in double precision, and keep what is closest."""
        for factor, ratio, use, row in zip(
            factors, *self.evaluate.double(functionals_of(factors)), strict=True
        ):
            calls.add(float(ratio), int(row), factor)
            if factor.shape[1] == 1:
                if self.largest[0] < ratio < np.inf:
                    self.largest = (float(ratio), factor)
                if use > self.use[0]:
                    self.use = (float(use), factor)

    def _ascend(self, count: int, rank: int, calls: _Calls) -> None:
        """Maximise SAR(model)/SAR(set) from the closest calls and from matrices spread over the model."""
        kept = list(calls.items)
        rows = np.array([row for _, row, _ in kept], dtype=np.int64)
        spread = np.arange(max(count - len(kept), 0), dtype=np.int64)
        # Once each matrix has had its turn, the next-lower eigenvector has.
        lower = spread // len(self.model)
        spread_rows = (
            spread * len(self.model) // max(len(spread), 1) if not lower.any() else spread % len(self.model)
        )
        all_rows = np.concatenate([rows, spread_rows])
        columns = np.array(self.set.packed, dtype=np.float32, order="C")
        across = np.ascontiguousarray(columns.T.astype(np.float64))
        gain = inner_weights(self.n)

        def work(first: int, last: int) -> tuple[np.ndarray, np.ndarray]:
            matrices = np.array(self.model.packed[all_rows[first:last]], dtype=np.float32, order="C")
            start = np.zeros((last - first, self.n, rank), dtype=np.complex128)
            values, vectors = np.linalg.eigh(unpack(matrices))
            for i in range(last - first):
                if first + i < len(kept):
                    factor = kept[first + i][2]
                    start[i, :, : factor.shape[1]] = factor[:, :rank]
                elif rank == 1:
                    start[i, :, 0] = vectors[i][:, -1 - lower[first + i - len(kept)] % self.n]
                else:
                    start[i] = vectors[i] * np.sqrt(values[i].clip(min=0) + 0.05 * values[i, -1])
            best, ratio = np.zeros_like(start), np.empty(last - first)
            ascend(matrices, columns, across, start, _STEPS, gain, best, ratio)
            return best, ratio

        parts = map_chunks("attack: maximising", len(all_rows), _ASCENTS_AT_ONCE, work, self.progress)
        best = np.concatenate([part[0] for part in parts])
        ratio = np.concatenate([part[1] for part in parts])
        self.n_ascents += len(ratio)
        self._confirm(best[np.argsort(ratio, kind="stable")[:_KEPT]], calls)
