"""Turn the dual solution of a failed search into evidence that one can check by hand."""

from __future__ import annotations

import numpy as np

from vop.hermitian import pack_covariance, pack_excitations, unpack
from vop.proof.result import Unproved

#: Excitations drawn from a witness covariance in search of one that fails by itself: so many, or
#: fewer where there are very many columns, but some.
_DRAWS, _PRODUCTS, _SOME = 512, 1 << 24, 8
#: Columns at a time, bounds memory.
_CHUNK = 1 << 15


def examine(
    index: int,
    target: np.ndarray,
    columns: np.ndarray,
    extra: np.ndarray,
    bound: float,
    witness: np.ndarray,
    worst_case: float,
) -> Unproved:
    """Evidence against target ⪯ Σ c C + extra.

    Parameters
    ----------
    target : (n²,) packed. columns : (C, n²) packed. extra : (n²,) packed.
    bound : upper bound of λmin over all weights. witness : (n²,) packed covariance of unit trace.
    """
    shortfall = -bound / worst_case
    if not bound < 0:
        return Unproved(index, shortfall, None, None, float("nan"))
    x = unpack(witness)
    values, vectors = np.linalg.eigh(x)
    n = len(values)
    count = max(_SOME, min(_DRAWS, _PRODUCTS // len(columns)))
    draws = np.random.default_rng(0).standard_normal((count, n, 2)) @ np.array([1, 1j])
    w = np.concatenate([vectors.T, (draws * np.sqrt(values.clip(min=0))) @ vectors.T])
    w /= np.linalg.norm(w, axis=1, keepdims=True)
    functionals = np.concatenate([pack_covariance(x)[None], pack_excitations(w)])
    left = functionals @ np.asarray(target, dtype=np.float64)
    right = np.full(len(functionals), -np.inf)
    for start in range(0, len(columns), _CHUNK):
        chunk = np.asarray(columns[start : start + _CHUNK], dtype=np.float64)
        right = np.maximum(right, (functionals @ chunk.T).max(axis=1))
    right += functionals @ extra
    ratios = left / np.where(right > 0, right, np.nan)
    best = int(np.nanargmax(ratios[1:])) + 1
    if ratios[best] > 1:
        return Unproved(index, shortfall, x, w[best - 1], float(ratios[best]))
    return Unproved(index, shortfall, x, None, float(ratios[0]))
