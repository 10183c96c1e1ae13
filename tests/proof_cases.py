"""References for the tests of proof and attack: exact rational arithmetic, a semidefinite solver, and a
plain compressor, none of which uses this project's numerics."""

from __future__ import annotations

import warnings
from fractions import Fraction

import cvxpy as cp
import numpy as np

import vop
from vop.hermitian import pack, round_outward
from vop.metadata import Metadata, Reference


def exactly_semidefinite(real: list[list[Fraction]], imag: list[list[Fraction]]) -> bool:
    """Whether the Hermitian matrix real + i·imag is positive semidefinite, in rational arithmetic.

    Symmetric elimination of the real 2n×2n matrix [[R, −J], [J, R]], whose spectrum is the same one,
    twice: a matrix is semidefinite exactly if each pivot is positive, or zero with a zero rest of row.
    """
    n = len(real)
    a = [[*(real[i][j] for j in range(n)), *(-imag[i][j] for j in range(n))] for i in range(n)] + [
        [*(imag[i][j] for j in range(n)), *(real[i][j] for j in range(n))] for i in range(n)
    ]
    for k in range(2 * n):
        if a[k][k] < 0:
            return False
        if a[k][k] == 0:
            if any(a[k][j] != 0 for j in range(k + 1, 2 * n)):
                return False
            continue
        for i in range(k + 1, 2 * n):
            if a[i][k] != 0:
                factor = a[i][k] / a[k][k]
                for j in range(k, 2 * n):
                    a[i][j] -= factor * a[k][j]
    return True


def exact_combination(
    terms: list[tuple[Fraction, np.ndarray]], shift: Fraction = Fraction(0)
) -> tuple[list[list[Fraction]], list[list[Fraction]]]:
    """Real and imaginary part of Σ c·A − shift·1 without rounding; A complex, taken as exact."""
    n = terms[0][1].shape[0]
    real = [[Fraction(0) - (shift if i == j else 0) for j in range(n)] for i in range(n)]
    imag = [[Fraction(0)] * n for _ in range(n)]
    for c, matrix in terms:
        for i in range(n):
            for j in range(n):
                real[i][j] += c * Fraction(float(matrix[i, j].real))
                imag[i][j] += c * Fraction(float(matrix[i, j].imag))
    return real, imag


def embedded(a: np.ndarray) -> np.ndarray:
    """Real symmetric (…, 2n, 2n) with the spectrum of (…, n, n) Hermitian, each eigenvalue twice."""
    top = np.concatenate([a.real, -a.imag], axis=-1)
    return np.concatenate([top, np.concatenate([a.imag, a.real], axis=-1)], axis=-2)


class SemidefiniteProgram:
    """max over c in the simplex of λmin(Σ c_k C_k − T), by clarabel through cvxpy."""

    def __init__(self, columns: np.ndarray) -> None:
        self.scale = float(np.abs(columns).max())
        self._columns = embedded(columns / self.scale)
        self._c, self._t = cp.Variable(len(columns)), cp.Variable()
        size = 2 * columns.shape[1]
        self._target = cp.Parameter((size, size), symmetric=True)
        mixture = cp.reshape(self._c @ self._columns.reshape(len(columns), -1), (size, size), order="C")
        self._semidefinite = mixture - self._target - self._t * np.eye(size) >> 0
        self._problem = cp.Problem(
            cp.Maximize(self._t), [self._c >= 0, cp.sum(self._c) == 1, self._semidefinite]
        )

    def best_margin(self, target: np.ndarray) -> float:
        """The maximum; the solver's weights and its dual matrix must enclose it to 1e-6 of the scale.

        Both ends are evaluated with numpy, so that the solver's own verdict on its accuracy is moot.
        """
        t = embedded(target / self.scale)
        self._target.value = t
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", UserWarning)
            self._problem.solve(solver=cp.CLARABEL, tol_gap_abs=1e-11, tol_gap_rel=1e-11, tol_feas=1e-11)
        c = self._c.value.clip(min=0)
        low = np.linalg.eigvalsh(np.tensordot(c / c.sum(), self._columns, 1) - t)[0]
        values, vectors = np.linalg.eigh(self._semidefinite.dual_value)
        x = (vectors * values.clip(min=0)) @ vectors.T
        x /= np.trace(x)
        high = np.tensordot(self._columns, x, 2).max() - np.tensordot(t, x, 2)
        assert high - low < 1e-6
        return self.scale * float(low + high) / 2


def metadata(n: int) -> Metadata:
    """Metadata of an invented array of n channels."""
    return Metadata(Reference("forward power"), tuple(str(c + 1) for c in range(n)))


def smooth_model(seed: int, n: int, count: int, harmonics: int = 3) -> vop.SarModel:
    """An invented model whose matrices change smoothly along a line of ``count`` points."""
    rng = np.random.default_rng(seed)
    s = np.linspace(0, 1, count)
    steps = np.pi * np.arange(1, harmonics + 1)
    waves = np.array([np.ones(count), *np.sin(np.outer(steps, s)), *np.cos(np.outer(steps, s))])
    shape = rng.normal(size=(len(waves), 3, n)) + 1j * rng.normal(size=(len(waves), 3, n))
    e = np.einsum("ws,wrn->srn", waves, shape)
    return vop.SarModel.from_matrices(np.einsum("sri,srj->sij", e.conj(), e))


def plain_clustering(model: vop.SarModel, overestimation: float) -> vop.VopSet:
    """Clustering after Eichfelder & Gebhardt, Magn Reson Med 2011;66:1468, in plain numpy."""
    q, n = model.matrices(), model.n_channels
    largest = np.linalg.eigvalsh(q)[:, -1]
    worst = float(largest.max()) * (1 - 1e-12)
    hair = 8 * n * 2.0**-24 * worst
    allowed = overestimation * worst - hair
    left, vops, cores = np.argsort(-largest, kind="stable"), [], []
    while len(left):
        core = int(left[0])
        z, members = np.zeros((n, n), dtype=complex), []
        closeness = np.linalg.eigvalsh(q[core] - q[left])[:, 0]
        for place in np.argsort(-closeness, kind="stable"):
            values, vectors = np.linalg.eigh(q[left[place]] - q[core] - z)
            grown = z + (vectors * values.clip(min=0)) @ vectors.conj().T
            if np.linalg.eigvalsh(grown)[-1] > allowed:
                break
            z = grown
            members.append(place)
        left = np.delete(left, members)
        vops.append(q[core] + z + 0.5 * hair * np.eye(n))
        cores.append(core)
    return vop.VopSet(
        packed=round_outward(pack(np.array(vops))),
        overestimation=overestimation,
        worst_case=worst,
        overestimation_matrix=worst * np.eye(n, dtype=complex),
        core_index=np.array(cores),
        method="clustering",
        metadata=model.metadata,
    )


def set_of(
    vops: np.ndarray, model: vop.SarModel, overestimation: float, worst: float | None = None
) -> vop.VopSet:
    """A set of given float32-exact VOPs (K, n, n), without core hints."""
    n = model.n_channels
    if worst is None:
        worst = float(np.linalg.eigvalsh(model.matrices())[:, -1].max()) * (1 - 1e-12)
    return vop.VopSet(
        packed=pack(vops, np.float32),
        overestimation=overestimation,
        worst_case=worst,
        overestimation_matrix=worst * np.eye(n, dtype=complex),
        core_index=np.full(len(vops), -1),
        method="by hand",
        metadata=model.metadata,
    )
