"""What a proof says: counts, margins, and what could not be proved, with a reason one can check."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

#: Unproved items kept, and named in the summary.
LISTED, _NAMED = 1000, 8


@dataclass(frozen=True, eq=False)
class Unproved:
    """A matrix (first statement) or VOP (second) whose inequality was not proved.

    index : row of the model, or of the set.
    shortfall : −(upper bound of λmin that any weights reach), fraction of the worst case, within a few
        percent; positive means that no weights exist, as ``covariance`` shows; NaN where nothing was
        searched.
    covariance : (n, n) complex128 X ⪰ 0 of unit trace along which the inequality fails, or None.
    excitation : (n,) complex128 of unit length along which it fails already, or None: a failure that
        needs a covariance (the average of several excitations) may have none.
    ratio : left over right side of the inequality, along ``excitation`` if there is one, else along
        ``covariance``; above 1, or NaN where there is neither.
    """

    index: int
    shortfall: float
    covariance: np.ndarray | None
    excitation: np.ndarray | None
    ratio: float

    def text(self) -> str:
        """One line."""
        if self.covariance is None:
            return f"{self.index}: undecided" if self.shortfall == self.shortfall else f"{self.index}"
        along = "a covariance" if self.excitation is None else "an excitation"
        return f"{self.index}: short by {self.shortfall:.3g} of worst case, {self.ratio:.6f} along {along}"


@dataclass(frozen=True, eq=False)
class Statement:
    """One of the two inequalities, over all its targets.

    n_targets, n_proved : counts. n_single : of the proved ones, those by one column alone.
    most_terms : most columns combined for one target.
    margin : proved lower bound of λmin(right − left side) over all proved targets, as a fraction of
        the worst case, within about 2 %; margin_index attains it. ∞ and −1 where none is proved.
    unproved : worst first, LISTED at most.
    """

    n_targets: int
    n_proved: int
    n_single: int
    most_terms: int
    margin: float
    margin_index: int
    unproved: tuple[Unproved, ...]

    @property
    def holds(self) -> bool:
        """Whether every target is proved."""
        return self.n_targets > 0 and self.n_proved == self.n_targets

    def record(self) -> dict[str, Any]:
        """Plain JSON values."""
        return {
            "targets": self.n_targets,
            "proved": self.n_proved,
            "by_one_column": self.n_single,
            "most_columns_combined": self.most_terms,
            "margin": self.margin if np.isfinite(self.margin) else None,
            "margin_index": self.margin_index,
            "unproved": [int(u.index) for u in self.unproved],
        }


@dataclass(frozen=True, eq=False)
class ProofResult:
    """Outcome of :func:`vop.proof.prove` or :func:`vop.proof.recheck`.

    underestimation : every Q_v ⪯ Σ c_k A_k. overestimation : every A_k ⪯ Σ c_v Q_v + εS.
    worst_case_attained : worst_case ≤ max over matrices of λmax, in exact arithmetic, by
        ``worst_case_index``.
    relative : whether S ⪯ Σ c_v Q_v is proved, which makes ε a bound of the relative overestimation.
    bound_text : what the overestimation is at most, in words.
    """

    underestimation: Statement
    overestimation: Statement
    worst_case_attained: bool
    worst_case_index: int
    relative: bool
    bound_text: str
    set_digest: str
    model_digest: str
    seconds: float

    @property
    def holds(self) -> bool:
        """Whether everything is proved."""
        return self.underestimation.holds and self.overestimation.holds and self.worst_case_attained

    @property
    def unproved(self) -> tuple[Unproved, ...]:
        """Unproved matrices of the model, then unproved VOPs; worst first within each."""
        return self.underestimation.unproved + self.overestimation.unproved

    def summary(self) -> str:
        """Text of a few lines."""
        attained = (
            f"attained by matrix {self.worst_case_index}, in exact arithmetic"
            if self.worst_case_attained
            else "NOT attained by any matrix: the bound is stated on too large a worst case"
        )
        lines = [
            f"proof           {'PROVED' if self.holds else 'NOT PROVED'}",
            *_lines("underestimates", self.underestimation, "matrices", "VOP"),
            *_lines("overestimates", self.overestimation, "VOPs", "matrix"),
            f"  bound         {self.bound_text}",
            f"worst case      {attained}",
            f"time            {self.seconds:.1f} s",
        ]
        return "\n".join(lines)

    def record(self) -> dict[str, Any]:
        """Plain JSON values for the job folder."""
        return {
            "holds": self.holds,
            "underestimation": self.underestimation.record(),
            "overestimation": self.overestimation.record(),
            "worst_case_attained": self.worst_case_attained,
            "worst_case_index": self.worst_case_index,
            "relative": self.relative,
            "bound": self.bound_text,
            "set_digest": self.set_digest,
            "model_digest": self.model_digest,
        }


def _lines(name: str, part: Statement, what: str, by: str) -> list[str]:
    how = f"{part.n_single} by one {by}"
    if part.n_proved > part.n_single:
        how += f", {part.n_proved - part.n_single} by combinations of up to {part.most_terms}"
    lines = [f"{name:<15} {part.n_proved} of {part.n_targets} {what} proved: {how}"]
    if part.n_proved:
        lines.append(
            f"  margin        at least {part.margin:.3g} of worst case, least at index {part.margin_index}"
        )
    if part.unproved:
        lines += [f"  NOT PROVED    {item.text()}" for item in part.unproved[:_NAMED]]
        more = part.n_targets - part.n_proved - _NAMED
        if more > 0:
            lines.append(f"  NOT PROVED    and {more} more")
    return lines
