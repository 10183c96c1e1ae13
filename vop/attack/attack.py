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
_PER_COVARIANCE, _PER_ASCENT, _STEPS = 8, 128, 60
#: Short local maximisations that choose where the long ones start, for each of those.
_TRIALS_PER_ASCENT, _TRIAL_STEPS = 4, 12
_ASCENTS_AT_ONCE, _AT_ONCE = 64, 1 << 13
#: Rounds of "excess over the matrix that the model has its maximum at".
_EXCESS_ROUNDS = 3


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
    n_excitations : how many to draw; three for each VOP, an eighth as many covariances, and a
        128th as many local maximisations come on top.
    seed : of everything random.

    Raises
    ------
    InputError
        Where set and model differ in channels, reference or measure, or ``n_excitations`` < 1.
    """
    theirs, ours = vop_set.metadata, model.metadata
    if (theirs.channel_names, theirs.reference, theirs.measure) != (
        ours.channel_names,
        ours.reference,
        ours.measure,
    ):
        raise InputError("set and model differ in channels, reference or measure and do not belong together")
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
        self._columns = np.array(vop_set.packed, dtype=np.float32, order="C")
        self._across = np.ascontiguousarray(self._columns.T.astype(np.float64))
        self._gain = inner_weights(self.n)

    def run(self, n_excitations: int) -> AttackResult:
        single, averaged = _Calls(), _Calls()
        n_from_vops = self._sweep_vops(single)
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
            n_excitations=n_excitations + n_from_vops,
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
            most_used = np.argsort(-use, kind="stable")[:_CLOSEST]
            suspect = np.flatnonzero(ratio < 1 + SINGLE)
            chosen = np.unique(np.concatenate([order[:_CLOSEST], order[-1:], most_used, suspect]))
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
        """Maximise SAR(model)/SAR(set) from the closest calls and from eigenvectors of matrices.

        Eigenvectors of matrices spread over the model get a few steps first; the best go on.
        """
        chosen, starts = self._screened(count, rank)
        for _, row, factor in calls.items:
            start = np.zeros((self.n, rank), dtype=np.complex128)
            start[:, : factor.shape[1]] = factor
            chosen.append(row)
            starts.append(start)
        best, ratio = self._run("attack: maximising", np.array(chosen), np.array(starts), _STEPS)
        self._confirm(best[np.argsort(ratio, kind="stable")[:_KEPT]], calls)

    def _screened(self, count: int, rank: int) -> tuple[list[int], list[np.ndarray]]:
        n_matrices, n_trials = len(self.model), count * _TRIALS_PER_ASCENT
        turns = min(-(-n_trials // n_matrices), self.n if rank == 1 else 1)
        per_turn = min(n_trials, n_matrices)
        rows = np.arange(per_turn) * n_matrices // per_turn
        found, places, starts = [], [], []
        for turn in range(turns):
            start = np.concatenate(
                [self._eigenvectors(rows[a : a + _AT_ONCE], rank, turn) for a in range(0, per_turn, _AT_ONCE)]
            )
            best, ratio = self._run("attack: screening", rows, start, _TRIAL_STEPS)
            found.append(ratio)
            places.append(rows)
            starts.append(best)
        order = np.argsort(np.concatenate(found), kind="stable")[:count]
        return list(np.concatenate(places)[order]), list(np.concatenate(starts)[order])

    def _eigenvectors(self, rows: np.ndarray, rank: int, turn: int) -> np.ndarray:
        values, vectors = np.linalg.eigh(unpack(self.model.packed[rows]))
        if rank == 1:
            return vectors[:, :, -1 - turn, None]
        spread = values.clip(min=0) + 0.05 * values[:, -1:]
        return vectors * np.sqrt(spread)[:, None, :]

    def _run(
        self, label: str, rows: np.ndarray, start: np.ndarray, steps: int
    ) -> tuple[np.ndarray, np.ndarray]:
        self.n_ascents += len(rows)

        def work(first: int, last: int) -> tuple[np.ndarray, np.ndarray]:
            part = np.ascontiguousarray(start[first:last])
            best, ratio = np.zeros_like(part), np.empty(last - first)
            matrices = np.array(self.model.packed[rows[first:last]], dtype=np.float32, order="C")
            ascend(matrices, self._columns, self._across, part, steps, self._gain, best, ratio)
            return best, ratio

        parts = map_chunks(label, len(rows), _ASCENTS_AT_ONCE, work, self.progress)
        return np.concatenate([p[0] for p in parts]), np.concatenate([p[1] for p in parts])

    def _sweep_vops(self, calls: _Calls) -> int:
        """Where each VOP overestimates most: its own peaks, and those of its excess over the model."""
        count = 0
        for first in range(0, len(self.set), _BATCH):
            vops = unpack(self.set.packed[first : first + _BATCH])
            peaks = np.linalg.eigh(vops)[1][:, :, -1:]
            for _ in range(_EXCESS_ROUNDS):
                _, _, rows = self.evaluate.double(functionals_of(peaks))
                self._confirm(peaks, calls)
                count += len(peaks)
                peaks = np.linalg.eigh(vops - unpack(self.model.packed[rows]))[1][:, :, -1:]
            self.progress("attack: VOPs", min(first + _BATCH, len(self.set)), len(self.set))
        return count
