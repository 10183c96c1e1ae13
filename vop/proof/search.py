"""Find weights for both statements. Whatever is found here is proved in :mod:`vop.proof.certify`."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from vop.hermitian import channels_from_width, inner_weights
from vop.kernels import proof_search as kernel
from vop.progress import Progress, silent
from vop.proof.cover import WEIGHT_BITS, Cover
from vop.proof.parallel import map_chunks

#: Targets that share a pool of remembered combinations; fixed.
_CHUNK = 512
#: Probing excitations beside the n single channels.
_PROBES = 32
#: Columns that a target of the second statement is tried against at first, and joined per round.
_SHORTLIST = 256
_ROUNDS = 24
#: Open targets of a chunk whose witness is kept.
WITNESSES = 32


@dataclass(frozen=True, eq=False)
class Found:
    """A proposed cover, with what is known of the targets left open.

    bound : (R,) float64, upper bound of λmin that any weights reach where open, NaN where nothing is
    known, ∞ where covered (float arithmetic). witnesses : of some open targets, those of least bound
    first of all, the packed covariance (n²,) of unit trace that shows it.
    """

    cover: Cover
    bound: np.ndarray
    witnesses: dict[int, np.ndarray]


class Columns:
    """Columns prepared for searching: transposed, and probed."""

    def __init__(self, packed: np.ndarray) -> None:
        self.packed = np.array(packed, dtype=np.float32, order="C")
        self.n = channels_from_width(self.packed.shape[1])
        self.gain = inner_weights(self.n)
        self.transposed = np.ascontiguousarray(self.packed.T.astype(np.float64))
        spread = np.unique(np.linspace(0, len(packed) - 1, _PROBES).astype(np.int64))
        x = np.zeros((self.n + len(spread), self.n), dtype=np.complex128)
        x[: self.n] = np.eye(self.n)
        kernel.leading_excitations(self.packed[spread], self.n, 30, x[self.n :])
        self.probes = np.empty((len(x), self.n**2))
        kernel.functionals(x, self.n, self.gain, self.probes)
        self.probe_values = np.empty((len(x), len(packed)))
        for f, values in zip(self.probes, self.probe_values, strict=True):
            kernel.values_on(self.packed, f, values)
        self.probe_mean = self.probe_values.mean(axis=1)
        spread_of_values = self.probe_values.std(axis=1)
        self.probe_spread = spread_of_values + 1e-12 * np.abs(self.probe_mean) + 1e-300

    def search(self, targets: np.ndarray, extra: np.ndarray, scale: float) -> Found:
        """Weights for (R, n²) float32 ``targets``, one after another."""
        starts, index, weight, bound, witness = kernel.search(
            targets,
            extra,
            self.packed,
            self.transposed,
            self.probes,
            self.probe_values,
            self.probe_mean,
            self.probe_spread,
            scale,
            self.n,
            self.gain,
        )
        cover = Cover(starts, index, np.ldexp(weight, WEIGHT_BITS).astype(np.int64))
        failed = np.flatnonzero(bound < 0)
        least = failed[np.argsort(bound[failed], kind="stable")[:WITNESSES]]
        return Found(cover, bound, {int(r): witness[r].copy() for r in least})


def search_cover(
    label: str,
    targets: np.ndarray,
    columns: Columns,
    extra: np.ndarray,
    scale: float,
    progress: Progress,
) -> Found:
    """Weights for many targets over few columns (the first statement).

    Parameters
    ----------
    targets : (R, n²) float32 packed, array or memory map.
    scale : worst-case eigenvalue in W/kg per |w|²; sets what counts as converged.
    """

    def work(first: int, last: int) -> Found:
        return columns.search(np.array(targets[first:last], dtype=np.float32, order="C"), extra, scale)

    parts = map_chunks(label, len(targets), _CHUNK, work, progress)
    witnesses = {chunk * _CHUNK + r: x for chunk, part in enumerate(parts) for r, x in part.witnesses.items()}
    return Found(Cover.joined([p.cover for p in parts]), np.concatenate([p.bound for p in parts]), witnesses)


def search_among_many(target: np.ndarray, rows: np.ndarray, extra: np.ndarray, scale: float) -> Found:
    """Weights for one target over very many columns (the second statement, where no hint helps).

    Solves over a shortlist; where that fails, the rows that exceed most along the witness join it,
    until the target is covered or the witness holds against all rows.

    Parameters
    ----------
    target : (n²,) float32. rows : (N, n²) float32 packed, array or memory map.
    """
    n = channels_from_width(rows.shape[1])
    wanted = np.asarray(target, dtype=np.float64)
    gain = inner_weights(n)
    x = np.zeros((n + 1, n), dtype=np.complex128)
    x[:n] = np.eye(n)
    kernel.leading_excitations(wanted[None], n, 30, x[n:])
    probes = np.empty((n + 1, n * n))
    kernel.functionals(x, n, gain, probes)
    worst = np.full(len(rows), np.inf)
    for f in probes:
        worst = np.minimum(worst, _along(rows, f) - float((wanted - extra) @ f))
    shortlist = np.sort(np.argsort(-worst, kind="stable")[:_SHORTLIST])
    found = Columns(rows[shortlist]).search(target[None], extra, scale)
    for _ in range(_ROUNDS):
        if 0 not in found.witnesses:
            break
        x = found.witnesses[0]
        values = _along(rows, x * gain)
        bound = float(values.max() - (wanted - extra) @ (x * gain))
        joining = np.argsort(-values, kind="stable")[: _SHORTLIST // 4]
        grown = np.union1d(shortlist, joining)
        if bound < 0 or len(grown) == len(shortlist):
            return Found(found.cover, np.array([bound]), found.witnesses)
        shortlist = grown
        found = Columns(rows[shortlist]).search(target[None], extra, scale)
    cover = Cover(found.cover.starts, shortlist[found.cover.index], found.cover.weight)
    return Found(cover, found.bound, found.witnesses)


def _along(rows: np.ndarray, f: np.ndarray) -> np.ndarray:
    """(N,) float64: tr(Q_v X) for a packed functional."""
    out = np.empty(len(rows))

    def work(first: int, last: int) -> None:
        kernel.values_on(np.array(rows[first:last], dtype=np.float32, order="C"), f, out[first:last])

    map_chunks("searching", len(rows), 1 << 15, work, silent)
    return out
