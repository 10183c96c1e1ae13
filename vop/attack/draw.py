"""Excitations and covariances to attack with, reproducible batch by batch."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from vop.hermitian import pack_excitations, unpack
from vop.sarmodel import SarModel
from vop.vopset import VopSet


class Draw:
    """Batches of factors W, (count, n, r): X = W Wᴴ has unit trace, r = 1 are excitations."""

    def __init__(self, vop_set: VopSet, model: SarModel, seed: int) -> None:
        self._set, self._model, self._seed = vop_set.packed, model.packed, seed
        self.n = vop_set.n_channels
        self._kinds: tuple[Callable[[np.random.Generator, int], np.ndarray], ...] = (
            self._directions,
            self._phases,
            self._eigenvectors,
            self._sparse,
            self._differences,
            self._modes,
        )

    def excitations(self, batch: int, count: int) -> np.ndarray:
        """(count, n, 1): one kind for each batch, in turn."""
        rng = np.random.default_rng([self._seed, 0, batch])
        w = self._kinds[batch % len(self._kinds)](rng, count)[:count]
        return _unit(w[:, :, None])

    def covariances(self, batch: int, count: int) -> np.ndarray:
        """(count, n, r): averages of r excitations of any kind with random shares, r = 2 … n in turn."""
        rng = np.random.default_rng([self._seed, 1, batch])
        rank = 2 + batch % (self.n - 1)
        kind = self._kinds[batch // (self.n - 1) % len(self._kinds)]
        w = _unit(kind(rng, count * rank)[: count * rank, :, None])[:, :, 0]
        shares = rng.dirichlet(np.full(rank, 0.7), count)
        w = w[rng.permutation(len(w))].reshape(count, rank, self.n)
        return _unit((w * np.sqrt(shares)[:, :, None]).swapaxes(1, 2))

    def _directions(self, rng: np.random.Generator, count: int) -> np.ndarray:
        """Uniform on the unit sphere."""
        return _gaussian(rng, (count, self.n))

    def _phases(self, rng: np.random.Generator, count: int) -> np.ndarray:
        """Equal amplitudes, random phases."""
        return np.exp(2j * np.pi * rng.random((count, self.n)))

    def _sparse(self, rng: np.random.Generator, count: int) -> np.ndarray:
        """One to about half of the channels."""
        active = rng.integers(1, max(2, self.n // 2 + 1), count)
        rank = np.argsort(rng.random((count, self.n)), axis=1)
        return _gaussian(rng, (count, self.n)) * (rank < active[:, None])

    def _modes(self, rng: np.random.Generator, count: int) -> np.ndarray:
        """Phase steps around the array, with errors of amplitude and phase."""
        mode = rng.integers(0, self.n, count)[:, None]
        ideal = np.exp(2j * np.pi * mode * np.arange(self.n) / self.n)
        error = rng.choice([0.02, 0.1, 0.3], (count, 1))
        return ideal * (1 + error * _gaussian(rng, (count, self.n)))

    def _eigenvectors(self, rng: np.random.Generator, count: int) -> np.ndarray:
        """All eigenvectors of matrices, and of a quarter as many VOPs."""
        needed = -(-count // self.n)
        rows = np.concatenate(
            [
                self._model[np.sort(rng.integers(0, len(self._model), needed - needed // 4))],
                self._set[rng.integers(0, len(self._set), needed // 4)],
            ]
        )
        return np.linalg.eigh(unpack(rows))[1].swapaxes(1, 2).reshape(-1, self.n)

    def _differences(self, rng: np.random.Generator, count: int) -> np.ndarray:
        """The two leading eigenvectors of Q − A, with A the VOP that is largest at Q's peak."""
        rows = unpack(self._model[np.sort(rng.integers(0, len(self._model), -(-count // 2)))])
        peaks = np.linalg.eigh(rows)[1][:, :, -1]
        covering = (pack_excitations(peaks) @ self._set.T.astype(np.float64)).argmax(axis=1)
        vectors = np.linalg.eigh(rows - unpack(self._set[covering]))[1][:, :, -2:]
        return vectors.swapaxes(1, 2).reshape(-1, self.n)


def _gaussian(rng: np.random.Generator, shape: tuple[int, ...]) -> np.ndarray:
    return rng.standard_normal(shape) + 1j * rng.standard_normal(shape)


def _unit(w: np.ndarray) -> np.ndarray:
    return w / np.linalg.norm(w, axis=(1, 2), keepdims=True)
