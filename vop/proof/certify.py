"""The step that a proof rests on: given weights, prove every matrix inequality in floating point."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from vop.errors import VopError
from vop.hermitian import channels_from_width
from vop.kernels.proof_psd import certify, keeps_small_numbers
from vop.progress import Progress
from vop.proof.cover import WEIGHT_BITS, Cover
from vop.proof.parallel import map_chunks

#: Targets at a time; fixed.
_CHUNK = 1 << 13


@dataclass(frozen=True, eq=False)
class Certified:
    """What was proved of one statement.

    proved : (R,) bool. margin : proved lower bound of λmin(Σ c C + E − T) over the proved rows,
    W/kg per |w|², within about 2 %; ∞ if no row is proved. row : one that attains it.
    """

    proved: np.ndarray
    margin: float
    row: int


def certify_cover(
    label: str,
    targets: np.ndarray,
    columns: np.ndarray,
    extra: np.ndarray,
    cover: Cover,
    progress: Progress,
) -> Certified:
    """Prove Σ_k c_k columns_k + extra ⪰ target for every target of ``cover``; no optimisation.

    Parameters
    ----------
    targets : (R, n²) float32 packed, array or memory map. columns : (C, n²) float32 packed.
    extra : (n²,) float64 packed, correct to one rounding per number.
    cover : sound as of :meth:`Cover.fault`; open targets count as not proved.
    """
    n = channels_from_width(targets.shape[1])
    # False until proved, whatever becomes of a chunk.
    proved = np.zeros(len(targets), dtype=np.bool_)

    def work(first: int, last: int) -> tuple[float, int]:
        if not keeps_small_numbers(np.float64(2.0**-1022), np.float32(2.0**-126)):
            raise VopError(
                "this process flushes small numbers to zero (some library switched that on), "
                "which the rounding bounds of the proof do not allow; run it in a fresh process"
            )
        part = cover.rows(first, last)
        used, index = np.unique(part.index, return_inverse=True)
        weight = np.ldexp(part.weight.astype(np.float64), -WEIGHT_BITS)
        margin, row = certify(
            np.array(targets[first:last], dtype=np.float32, order="C"),
            extra,
            np.array(columns[used], dtype=np.float32, order="C"),
            part.starts,
            index.astype(np.int64),
            weight,
            n,
            proved[first:last],
        )
        return margin, first + row

    results = map_chunks(label, len(targets), _CHUNK, work, progress)
    margin, row = min(results, default=(np.inf, -1))
    return Certified(proved, float(margin), int(row))
