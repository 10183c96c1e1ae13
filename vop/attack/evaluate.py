"""SAR of many covariances in a model and in a set: single precision proposes, double confirms."""

from __future__ import annotations

import numpy as np

from vop.hermitian import inner_weights, pack, pack_covariance
from vop.kernels.attack_maxima import maxima
from vop.sarmodel import SarModel
from vop.vopset import VopSet

#: Matrices in one product, few enough for the products to stay in the cache.
_BLOCK = 512
#: Matrices in one walk of double precision.
_CHUNK = 1 << 15
#: Relative error allowed to single precision.
SINGLE = 1e-4
_U = 2.0**-53


def functionals_of(factors: np.ndarray) -> np.ndarray:
    """(M, n²) packed functionals of X = W Wᴴ for factors W, (M, n, r)."""
    return pack_covariance(factors @ factors.conj().swapaxes(1, 2))


class Evaluator:
    """The maxima of a model and a set along functionals of unit trace."""

    def __init__(self, vop_set: VopSet, model: SarModel) -> None:
        self.n = vop_set.n_channels
        self._model = model.packed
        self._set = np.array(vop_set.packed, dtype=np.float32, order="C")
        self._bound = vop_set.overestimation * pack(vop_set.overestimation_matrix)
        self._blocks = self._ordered_blocks()

    def _ordered_blocks(self) -> list[tuple[float, int, int]]:
        """Blocks of the model with an upper bound of their eigenvalues (Frobenius), largest first."""
        gain = inner_weights(self.n)
        blocks = []
        for first in range(0, len(self._model), _BLOCK):
            rows = self._model[first : first + _BLOCK].astype(np.float64)
            blocks.append((float(np.sqrt((np.square(rows) @ gain).max())), first, first + len(rows)))
        return sorted(blocks, key=lambda block: (-block[0], block[1]))

    def single(self, functionals: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Set/model and share of the overestimation bound in use, each (M,) float32, to SINGLE."""
        f = functionals.astype(np.float32)
        of_set = (f @ self._set.T).max(axis=1)
        of_model = self._single_model(f)
        tiny = np.float32(1e-37)
        use = (of_set - of_model) / np.maximum(f @ self._bound.astype(np.float32), tiny)
        return of_set / np.maximum(of_model, tiny), use

    def _single_model(self, f: np.ndarray) -> np.ndarray:
        best = np.zeros(len(f), dtype=np.float32)
        alive = np.arange(len(f))
        for bound, first, last in self._blocks:
            # Along unit traces no value exceeds the largest eigenvalue.
            still = best[alive] <= bound * (1 + SINGLE)
            if np.count_nonzero(still) < 0.8 * len(alive):
                alive = alive[still]
                f = f[still]
            if not len(alive):
                break
            values = (f @ self._model[first:last].T).max(axis=1)
            best[alive] = np.maximum(best[alive], values)
        return best

    def double(self, functionals: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Set/model, bound use, and the model's row that attains its maximum, in fixed order."""
        of_set, _ = _maxima(self._set, functionals)
        of_model, rows = _maxima(self._model, functionals)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.where(of_model > 0, of_set / of_model, np.inf)
            use = (of_set - of_model) / (functionals @ self._bound)
        return ratio, use, rows

    def underestimates(self, factor: np.ndarray) -> bool:
        """Whether the model exceeds the set along W Wᴴ, W (n, r), whatever was rounded."""
        return self._enclosed(self._model, factor)[0] > self._enclosed(self._set, factor)[1]

    def overestimates(self, factor: np.ndarray) -> bool:
        """Whether the set exceeds the model by more than the bound, whatever was rounded."""
        low, of_model = self._enclosed(self._set, factor)[0], self._enclosed(self._model, factor)[1]
        allowed, error = _values(self._bound[None], factor)
        return bool(low > (of_model + allowed[0] + error[0]) * (1 + 8 * _U))

    def _enclosed(self, packed: np.ndarray, factor: np.ndarray) -> tuple[float, float]:
        low = high = -np.inf
        for first in range(0, len(packed), _CHUNK):
            values, error = _values(packed[first : first + _CHUNK].astype(np.float64), factor)
            low, high = max(low, float((values - error).max())), max(high, float((values + error).max()))
        return low, high


def _values(rows: np.ndarray, factor: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """tr(A W Wᴴ) of each row, and how far rounding can have moved it.

    Inner products of m terms, in any order, err by at most (m + 1)u of the sum of moduli (Higham,
    Accuracy and Stability of Numerical Algorithms, ch. 3): n² terms for the value; 2r for each
    entry of W Wᴴ, whose moduli sum to at most d_i d_j with d the row norms of W.
    """
    n, rank = factor.shape
    functional = functionals_of(factor[None])[0]
    d = np.sqrt(np.square(np.abs(factor)).sum(axis=1)) * (1 + 1e-9)
    moduli = pack_covariance(np.outer(d, d) * (1 + 1j))
    sizes = np.abs(rows)
    error = (n * n + 4) * _U * (sizes @ np.abs(functional)) + (2 * rank + 4) * _U * (sizes @ moduli)
    return rows @ functional, 1.01 * error


def _maxima(packed: np.ndarray, functionals: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    best = np.full(len(functionals), -np.inf)
    where = np.full(len(functionals), -1, dtype=np.int64)
    for first in range(0, len(packed), _CHUNK):
        rows = np.array(packed[first : first + _CHUNK], dtype=np.float32, order="C")
        maxima(rows, functionals, best, where, first)
    return best, where
