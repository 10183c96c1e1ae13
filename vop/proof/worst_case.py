"""That the stated worst case is attained: a Rayleigh quotient in exact arithmetic."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from vop.hermitian import channels_from_width, inner_weights, unpack
from vop.progress import Progress
from vop.proof.parallel import map_chunks

_CHUNK = 1 << 13


@dataclass(frozen=True, eq=False)
class Attained:
    """A matrix and an excitation with wᴴQw ≥ worst_case·‖w‖², row −1 where none was found."""

    row: int
    excitation: np.ndarray


def exact_quotient_reaches(packed: np.ndarray, w: np.ndarray, value: float) -> bool:
    """Whether wᴴQw ≥ value·wᴴw, evaluated in rational arithmetic without any rounding.

    Parameters
    ----------
    packed : (n²,) packed Q. w : (n,) complex. value : float64, taken as exact.
    """
    if not (np.isfinite(packed).all() and np.isfinite(w).all() and np.isfinite(value)):
        return False
    q = unpack(packed)
    n = len(w)
    re = [Fraction(float(v)) for v in w.real]
    im = [Fraction(float(v)) for v in w.imag]
    length = sum((a * a + b * b for a, b in zip(re, im, strict=True)), Fraction(0))
    total = Fraction(0)
    for i in range(n):
        total += Fraction(float(q[i, i].real)) * (re[i] ** 2 + im[i] ** 2)
        for j in range(i + 1, n):
            # 2 Re(conj(w_i) Q_ij w_j)
            a = re[i] * re[j] + im[i] * im[j]
            b = re[i] * im[j] - im[i] * re[j]
            total += 2 * (Fraction(float(q[i, j].real)) * a - Fraction(float(q[i, j].imag)) * b)
    return length > 0 and total >= Fraction(float(value)) * length


def find_attaining(packed: np.ndarray, value: float, progress: Progress) -> Attained:
    """A row of (N, n²) ``packed`` and an excitation that attain ``value``.

    Only rows with ‖Q‖_F ≥ value can; of each chunk the one of largest eigenvalue is tried.
    """
    n = channels_from_width(packed.shape[1])
    gain = inner_weights(n)

    def work(first: int, last: int) -> tuple[float, int]:
        rows = np.asarray(packed[first:last], dtype=np.float64)
        large = np.flatnonzero(np.square(rows) @ gain >= (value * (1 - 1e-9)) ** 2)
        if not large.size:
            return -np.inf, first
        values = np.linalg.eigvalsh(unpack(rows[large]))[:, -1]
        at = int(np.argmax(values))
        return float(values[at]), first + int(large[at])

    tops = sorted(map_chunks("worst case", len(packed), _CHUNK, work, progress), reverse=True)
    for top, row in tops:
        if top < value * (1 - 1e-9):
            break
        w = np.linalg.eigh(unpack(np.asarray(packed[row])))[1][:, -1]
        if exact_quotient_reaches(np.asarray(packed[row]), w, value):
            return Attained(row, w)
    return Attained(-1, np.zeros(n, dtype=np.complex128))
