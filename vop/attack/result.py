"""What an attack found: the closest calls, and whether one of them breaks a bound."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, eq=False)
class AttackResult:
    """The closest calls that an attack found. Ratios are SAR(set)/SAR(model).

    n_excitations, n_covariances : how many were evaluated. n_ascents : local maximisations on top.
    smallest_ratio, smallest_excitation : below 1 the set underestimates; (n,) complex128, unit length.
    smallest_ratio_covariance, smallest_covariance : likewise over covariances and excitations
        together; (n, n) complex128 of unit trace.
    largest_ratio, largest_excitation : the largest relative overestimation seen.
    largest_bound_use, largest_bound_excitation : largest (SAR(set) − SAR(model))/(ε wᴴSw) seen.
    underestimated, overestimated : whether a bound is broken even after allowing for all rounding.
    """

    n_excitations: int
    n_covariances: int
    n_ascents: int
    smallest_ratio: float
    smallest_excitation: np.ndarray
    smallest_ratio_covariance: float
    smallest_covariance: np.ndarray
    largest_ratio: float
    largest_excitation: np.ndarray
    largest_bound_use: float
    largest_bound_excitation: np.ndarray
    underestimated: bool
    overestimated: bool

    @property
    def broken(self) -> bool:
        """Whether anything was found that breaks a bound."""
        return self.underestimated or self.overestimated

    def summary(self) -> str:
        """Text of a few lines."""
        verdict = "nothing found that breaks the set, which is no proof"
        if self.underestimated:
            verdict = "BROKEN: the set underestimates SAR"
        elif self.overestimated:
            verdict = "BROKEN: the set overestimates SAR beyond its bound"
        lines = [
            f"attack          {verdict}",
            f"tried           {self.n_excitations} excitations, {self.n_covariances} covariances, "
            f"{self.n_ascents} local maximisations",
            f"set / model     {self.smallest_ratio:.7f} … {self.largest_ratio:.5g} over excitations, "
            f"from {self.smallest_ratio_covariance:.7f} over covariances",
            f"bound           {100 * self.largest_bound_use:.4g} % of ε used at most",
        ]
        if self.underestimated and self.smallest_ratio < 1:
            lines.append(f"excitation      {_polar(self.smallest_excitation)}")
        elif self.underestimated:
            lines.append("excitation      none by itself: it takes the average of several")
        elif self.overestimated:
            lines.append(f"excitation      {_polar(self.largest_bound_excitation)}")
        return "\n".join(lines)


def _polar(w: np.ndarray) -> str:
    return "  ".join(f"{abs(c):.4f}∠{np.degrees(np.angle(c)):.1f}°" for c in w)
