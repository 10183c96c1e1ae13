"""Weights of a statement Σ c_k C_k + E ⪰ T, one row of sparse weights for each target."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

#: Weights are integers in units of 2⁻⁴⁸; those of a target sum to exactly 2⁴⁸.
WEIGHT_BITS = 48
ONE = 1 << WEIGHT_BITS


@dataclass(frozen=True, eq=False)
class Cover:
    """Proposed weights; evidence only once :func:`vop.proof.certify.certify_cover` has gone over them.

    starts : (R + 1,) int64; target r uses the terms starts[r] … starts[r+1].
    index : (T,) int64, columns. weight : (T,) int64, in units of 2⁻⁴⁸.
    A target without terms is open.
    """

    starts: np.ndarray
    index: np.ndarray
    weight: np.ndarray

    def __len__(self) -> int:
        return len(self.starts) - 1

    def terms(self) -> np.ndarray:
        """(R,) int64: number of columns that each target uses."""
        return np.diff(self.starts)

    def rows(self, first: int, last: int) -> Cover:
        """The cover of targets first … last − 1."""
        a, b = self.starts[first], self.starts[last]
        return Cover(self.starts[first : last + 1] - a, self.index[a:b], self.weight[a:b])

    @classmethod
    def single(cls, index: np.ndarray) -> Cover:
        """One column each; −1 leaves a target open."""
        taken = index >= 0
        starts = np.concatenate([[0], np.cumsum(taken)]).astype(np.int64)
        chosen = index[taken].astype(np.int64)
        return cls(starts, chosen, np.full(len(chosen), ONE, dtype=np.int64))

    @classmethod
    def joined(cls, parts: list[Cover]) -> Cover:
        """Covers of consecutive targets as one."""
        offsets = np.cumsum([0, *(len(p.index) for p in parts)])
        starts = [np.zeros(1, dtype=np.int64)]
        starts += [p.starts[1:] + offset for p, offset in zip(parts, offsets[:-1], strict=True)]
        return cls(
            np.concatenate(starts).astype(np.int64),
            np.concatenate([p.index for p in parts] or [np.zeros(0, np.int64)]).astype(np.int64),
            np.concatenate([p.weight for p in parts] or [np.zeros(0, np.int64)]).astype(np.int64),
        )

    def replaced(self, at: np.ndarray, parts: list[Cover]) -> Cover:
        """This cover with the rows ``at`` replaced by one-row covers."""
        if not len(at):
            return self
        new = {int(r): part for r, part in zip(at, parts, strict=True)}
        return Cover.joined([new.get(r, self.rows(r, r + 1)) for r in range(len(self))])

    def fault(self, n_columns: int) -> str | None:
        """What is wrong with the weights as such, in words; None if nothing is."""
        s, index, weight = self.starts, self.index, self.weight
        if len(s) < 1 or s[0] != 0 or s[-1] != len(index) or len(index) != len(weight):
            return "the tables do not fit one another"
        if (np.diff(s) < 0).any():
            return "the offsets are not in order"
        if len(index) and (index.min() < 0 or index.max() >= n_columns):
            return f"an index is outside 0 … {n_columns - 1}"
        if len(weight) and (weight.min() <= 0 or weight.max() > ONE):
            return "a weight is outside (0, 1]"
        # Each weight is at most 2⁴⁸, so that cumulated sums of int64 may wrap; differences stay right
        # modulo 2⁶⁴, and a row of fewer than 2¹⁵ terms cannot wrap itself.
        if len(s) > 1 and np.diff(s).max() >= 1 << 15:
            return "a target has more than 32767 terms"
        total = np.concatenate([np.zeros(1, np.int64), np.cumsum(weight, dtype=np.int64)])
        sums = total[s[1:]] - total[s[:-1]]
        bad = np.flatnonzero((sums != ONE) & (np.diff(s) > 0))
        if bad.size:
            return f"the weights of target {int(bad[0])} do not sum to 1"
        return None
