"""What a bound means in numbers: the worst case, the overestimation matrix S, and the hair.

*Worst case.* The least of all claims that can be proved: a Rayleigh quotient wᴴQw/wᴴw of one member,
evaluated in rational arithmetic and rounded down. λmax of the member exceeds it by about 10⁻³²
relative, because the quotient is stationary at an eigenvector.

*Coordinates.* With S = L Lᴴ every statement about εS is one about ε·1 for L⁻¹QL⁻ᴴ, and back. Methods
therefore know the identity only. If S is a multiple of it, nothing is transformed.

*The hair.* Methods work at ε' < ε; the difference pays for everything that is not exact:

====================  ==============================================================================
δ = 2n·2⁻²⁴           added to every delivered matrix, so that A − Q has no exact zero eigenvalue,
                      which no floating-point proof could show; methods may err by δ/2.
2·(2√2·√(n−1)+2)·2⁻²⁴ outward rounding of A to float32 on delivery, and of Q on storage before: each
                      diagonal entry grows by at most Σ_j √2·2⁻²⁴·|q_ij| ≤ √2·√(n−1)·2⁻²⁴·‖Q‖ and
                      one upward rounding; by Gershgorin the matrix grows by twice the former.
====================  ==============================================================================

in units of the largest ‖A‖ ≤ (1 + ε)·worst; their sum is below 8n·2⁻²⁴ for every n, which is what is
taken. The rounding of the proof itself, some n²·2⁻⁵³, is lost in it. For other S the same numbers
count against λmin(S), once more for the rounding of the transformed matrices to float32, and the
congruences add n²·2⁻⁵⁰·κ(S): see :meth:`Coordinates.of`.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from vop.errors import InputError
from vop.hermitian import (
    U32,
    channels_from_width,
    identity,
    inner_weights,
    pack,
    round_outward,
    unpack,
)
from vop.kernels.eigen import back_transform, eigensystem
from vop.kernels.worst_case import congruence, frobenius_norms
from vop.parallel import map_chunks
from vop.progress import silent
from vop.sarmodel import CHUNK_ROWS

#: Below this, float32 numbers at 2⁻²⁴ of the worst case would near the subnormal ones.
LEAST_WORST_CASE = 1e-25


def as_rows(packed: np.ndarray) -> np.ndarray:
    """A read-only view of packed float32 rows, copied only if not contiguous and aligned.

    Kernels are then compiled for one kind of array, be it a memory map or not.
    """
    rows = np.require(packed, np.float32, ["C", "A"]).view(np.ndarray)
    rows.flags.writeable = False
    return rows


def frobenius(packed: np.ndarray) -> np.ndarray:
    """‖Q‖_F, (N,) float64, of packed float32 rows; never below λmax but for rounding.

    Raises
    ------
    InputError
        Names the first row that holds NaN or infinity.
    """
    rows, norms = as_rows(packed), np.empty(len(packed))
    gain = inner_weights(channels_from_width(packed.shape[1]))

    def work(first: int, last: int) -> None:
        frobenius_norms(rows, gain, first, last, norms)

    map_chunks("", len(rows), CHUNK_ROWS, work, silent)
    bad = np.flatnonzero(~np.isfinite(norms))
    if bad.size:
        raise InputError(f"matrix {int(bad[0])} of the model holds NaN or infinite values")
    return norms


def worst_case(packed: np.ndarray, norms: np.ndarray) -> tuple[float, int]:
    """Largest λmax, from below to one rounding, and a row that attains it.

    Parameters
    ----------
    packed : (N, n²) float32. norms : (N,), from :func:`frobenius`.

    Returns
    -------
    (value, row) : value ≤ λmax(Q_row) is proved; W/kg per |w|².
    """
    best, best_row, best_vector = -np.inf, -1, np.zeros(0, np.complex128)
    for row in np.argsort(-norms, kind="stable"):
        if norms[row] * (1 + 1e-12) < best:
            break
        value, vector = _leading(unpack(packed[row]))
        if value > best:
            best, best_row, best_vector = value, int(row), vector
    return _quotient_from_below(unpack(packed[best_row]), best_vector), best_row


def _leading(q: np.ndarray) -> tuple[float, np.ndarray]:
    """Largest eigenvalue of (n, n) Hermitian q and its eigenvector, both to rounding."""
    n = len(q)
    h, e, z, w = q.copy(), np.empty(n, np.complex128), np.empty((n, n)), np.empty(n, np.complex128)
    d, f, tau = np.empty(n), np.empty(n), np.empty(n)
    eigensystem(h, n, d, e, f, tau, z)
    top = int(np.argmax(d))
    back_transform(h, n, e, tau, z[top], w)
    return float(d[top]), w


def _quotient_from_below(q: np.ndarray, w: np.ndarray) -> float:
    """The largest float64 not above wᴴQw/wᴴw, in rational arithmetic."""
    re = [Fraction(float(v)) for v in w.real]
    im = [Fraction(float(v)) for v in w.imag]
    power = Fraction(0)
    for i in range(len(w)):
        power += Fraction(float(q[i, i].real)) * (re[i] ** 2 + im[i] ** 2)
        for j in range(i + 1, len(w)):
            power += 2 * Fraction(float(q[i, j].real)) * (re[i] * re[j] + im[i] * im[j])
            power -= 2 * Fraction(float(q[i, j].imag)) * (re[i] * im[j] - im[i] * re[j])
    exact = power / sum((a * a + b * b for a, b in zip(re, im, strict=True)), Fraction(0))
    value = float(exact)
    return value if Fraction(value) <= exact else float(np.nextafter(value, -np.inf))


def overestimation_row(matrix: np.ndarray | None, n: int, worst: float) -> np.ndarray:
    """S packed, (n²,) float64; identity × ``worst`` where ``matrix`` is None.

    Raises
    ------
    InputError
        Where ``matrix`` is not (n, n), finite, Hermitian and positive definite.
    """
    if matrix is None:
        return worst * identity(n)
    s = np.asarray(matrix)
    if s.shape != (n, n) or s.dtype.kind not in "fciu":
        raise InputError(f"overestimation_matrix should be ({n}, {n}) numbers, found {s.dtype} {s.shape}")
    s = s.astype(np.complex128)
    if not np.isfinite(s).all():
        raise InputError("overestimation_matrix holds NaN or infinite values")
    skew, scale = float(np.abs(s - s.conj().T).max()), float(np.abs(s).max())
    if skew > 1e-12 * scale:
        raise InputError(
            f"overestimation_matrix is not Hermitian: |S − Sᴴ| reaches {skew:.3g} of {scale:.3g}"
        )
    s = 0.5 * (s + s.conj().T)
    values = np.linalg.eigvalsh(s)
    if not values[0] > 0:
        raise InputError(
            f"overestimation_matrix is not positive definite: least eigenvalue {values[0]:.6g} W/kg of "
            f"{values[-1]:.6g}; add a multiple of the identity"
        )
    return pack(s)


@dataclass(frozen=True, eq=False)
class Coordinates:
    """The coordinates of a method and the way back.

    packed : (N, n²) float32; the model's own array where S is a multiple of the identity.
    scale : what ε' is multiplied by to give the method's absolute bound.
    epsilon_prime, delta : in units of S. hair : ε − ε'.
    worst : largest λmax of ``packed``.
    """

    packed: np.ndarray
    scale: float
    worst: float
    epsilon_prime: float
    delta: float
    s_row: np.ndarray
    root: np.ndarray | None

    @classmethod
    def of(cls, packed: np.ndarray, epsilon: float, s_row: np.ndarray, worst: float) -> Coordinates:
        """Coordinates in which S is ``scale`` times the identity.

        Raises
        ------
        InputError
            Where the hair would eat half of ε: too small an ε for float32 files, or S too
            ill-conditioned.
        """
        n = channels_from_width(packed.shape[1])
        scalar = float(s_row[0])
        if np.array_equal(s_row, scalar * identity(n)):
            units = worst / scalar + epsilon
            hair, delta = 8 * n * U32 * units, 2 * n * U32 * units
            _require_room(epsilon, hair, n, 1.0)
            return cls(packed, scalar, worst, epsilon - hair, delta, s_row, None)
        # S/worst keeps the transformed numbers in the range of the old.
        root = np.linalg.cholesky(unpack(s_row) / worst)
        least, largest = np.linalg.eigvalsh(unpack(s_row))[[0, -1]]
        kappa = largest / least
        units = (worst + epsilon * largest) / least
        hair = (12 * n * U32 + n * n * 2.0**-50 * kappa) * units
        _require_room(epsilon, hair, n, kappa)
        moved = _transformed(packed, np.linalg.inv(root))
        top, _ = worst_case(moved, frobenius(moved))
        return cls(moved, worst, top, epsilon - hair, 2 * n * U32 * units, s_row, root)

    def back(self, delivered: np.ndarray) -> np.ndarray:
        """Delivered matrices (K, n²) float64 of a method, as stored: (K, n²) float32, hair added."""
        n = channels_from_width(delivered.shape[1])
        out = np.empty(delivered.shape, np.float32)
        for start in range(0, len(out), CHUNK_ROWS):
            part = np.array(delivered[start : start + CHUNK_ROWS], dtype=np.float64, order="C")
            if self.root is not None:
                congruence(part, n, self.root, part)
            part += self.delta * self.s_row
            out[start : start + CHUNK_ROWS] = round_outward(part)
        return out


def _require_room(epsilon: float, hair: float, n: int, kappa: float) -> None:
    if hair > 0.5 * epsilon:
        why = f" and an overestimation matrix of condition {kappa:.3g}" if kappa > 1 else ""
        raise InputError(
            f"overestimation {epsilon:.3g} is too small for float32 files of {n} channels{why}: "
            f"rounding alone takes {hair:.3g}; ask for at least {2 * hair:.2g}"
            + (", or add a multiple of the identity" if kappa > 1 else "")
        )


def _transformed(packed: np.ndarray, inverse_root: np.ndarray) -> np.ndarray:
    n = len(inverse_root)
    out = np.empty(packed.shape, dtype=np.float32)

    def work(first: int, last: int) -> None:
        part = np.array(packed[first:last], dtype=np.float64, order="C")
        congruence(part, n, inverse_root, part)
        out[first:last] = round_outward(part)

    map_chunks("", len(packed), 1 << 12, work, silent)
    return out
