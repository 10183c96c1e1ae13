"""What an error of S leaves of a power: intervals, and the refusal where they are too wide.

Near |S| = 1 the accepted power is the small difference of two large ones, and a matching network
multiplies the error of S. Every bound here holds for all errors Δ of S with ‖Δ‖₂ ≤ δ.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from vop.errors import InputError
from vop.network.parameters import checked_s

#: An interval whose ends differ by more than this is no result.
WIDEST = 2.0


@dataclass(frozen=True)
class PowerInterval:
    """Where a power lies: low ≤ nominal ≤ high, in W per |w|² or as a factor on a nominal 1."""

    low: float
    nominal: float
    high: float

    @property
    def spread(self) -> float:
        """high / low; infinite where low is not positive."""
        return self.high / self.low if self.low > 0 else np.inf

    def require(self, what: str) -> PowerInterval:
        """Itself.

        Raises
        ------
        InputError
            Where the interval spans more than a factor of two.
        """
        if not self.spread <= WIDEST:
            raise InputError(
                f"{what}: with the stated accuracy of S the power lies anywhere between {self.low:.4g} and "
                f"{self.high:.4g} (nominal {self.nominal:.4g}), more than a factor of two; S is too "
                "inaccurate so near |S| = 1: run the simulation longer, or measure S better"
            )
        return self


def checked_accuracy(accuracy: float) -> float:
    """δ as a float.

    Raises
    ------
    InputError
        Where it is not a finite number ≥ 0.
    """
    value = float(accuracy)
    if not (np.isfinite(value) and value >= 0):
        raise InputError(f"accuracy of S {accuracy!r}: the bound on ‖δS‖₂ must be finite and ≥ 0")
    return value


def factor_of_inverse(g: float) -> PowerInterval:
    """Bounds of ‖(I − GΔ)⁻¹ x‖² / ‖x‖² where ‖GΔ‖₂ ≤ g.

    The singular values of I − GΔ lie within 1 ± g. At g ≥ 1 there is no upper bound.
    """
    return PowerInterval((1 + g) ** -2, 1.0, (1 - g) ** -2 if g < 1 else np.inf)


def accepted_power_interval(
    s: np.ndarray, accuracy: float, w: np.ndarray, absorbed: np.ndarray | None = None
) -> PowerInterval:
    """Accepted power wᴴ(I − SᴴS)w of an excitation, with ±δS.

    ‖(S + Δ)w‖ lies within ‖Sw‖ ± δ‖w‖. A passive array accepts at least nothing, and at least what
    tissue absorbs.

    Parameters
    ----------
    s : (n, n). accuracy : δ ≥ ‖Δ‖₂. w : (n,) complex, √W.
    absorbed : (n, n) absorbed-power matrix, W per |w|², raises the lower end; only as good as the fields.

    Raises
    ------
    InputError
        Where shapes do not fit or δ is no bound.
    """
    s, delta = checked_s(s), checked_accuracy(accuracy)
    w = np.asarray(w, dtype=np.complex128)
    if w.shape != (len(s),):
        raise InputError(f"excitation of shape {w.shape} for {len(s)} ports")
    forward, back = float(np.vdot(w, w).real), float(np.linalg.norm(s @ w))
    error = delta * np.sqrt(forward)
    low = max(forward - (back + error) ** 2, 0.0)
    if absorbed is not None:
        low = max(low, float(np.vdot(w, absorbed @ w).real))
    high = forward - max(back - error, 0.0) ** 2
    return PowerInterval(min(low, high), forward - back**2, high)
