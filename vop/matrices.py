"""Border control for matrices that somebody else made: Hermitian, finite, positive semidefinite."""

from __future__ import annotations

import numpy as np

from vop.errors import InputError
from vop.hermitian import U32, pack, round_outward
from vop.storage import require_finite

#: Rows per eigenvalue batch; bounds memory, not results.
_BATCH = 1 << 14


def validated_packed(matrices: np.ndarray) -> np.ndarray:
    """Check (N, n, n) matrices and pack them outward to float32.

    A matrix rounded entry by entry to float32 is slightly indefinite, so that λmin is accepted down
    to −4n·2⁻²⁴·λmax, a bound on what such rounding can do (each entry moves by at most 2⁻²⁴ of its
    modulus, the matrix by at most √n·2⁻²⁴·‖Q‖_F ≤ n·2⁻²⁴·‖Q‖, complex entries and slack included).

    Parameters
    ----------
    matrices : (N, n, n) complex or real, W/kg per |w|².

    Returns
    -------
    (N, n²) float32, never below the input in the semidefinite order.

    Raises
    ------
    InputError
        Names the first offending matrix and the value found.
    """
    matrices = np.asarray(matrices)
    if matrices.ndim != 3 or matrices.shape[1] != matrices.shape[2] or 0 in matrices.shape:
        raise InputError(f"matrices should have shape (N, n, n) with N, n ≥ 1, found {matrices.shape}")
    if matrices.dtype.kind not in "fciu":
        raise InputError(f"matrices should be numbers, found dtype {matrices.dtype}")
    n = matrices.shape[-1]
    out = np.empty((matrices.shape[0], n * n), dtype=np.float32)
    for start in range(0, matrices.shape[0], _BATCH):
        batch = matrices[start : start + _BATCH].astype(np.complex128)
        require_finite(batch, f"matrices (counted from {start})")
        scale = np.abs(batch).max(axis=(1, 2))
        if scale.max() > np.finfo(np.float32).max / (4 * n):
            raise InputError(
                f"matrix {start + int(scale.argmax())}: entries up to {scale.max():.3g} "
                "overflow float32 storage; check the units"
            )
        skew = np.abs(batch - batch.conj().swapaxes(1, 2)).max(axis=(1, 2))
        bad = np.flatnonzero(skew > 8 * U32 * scale)
        if bad.size:
            first = int(bad[0])
            raise InputError(
                f"matrix {start + first} is not Hermitian: |Q − Qᴴ| reaches {skew[first]:.3g} where the "
                f"largest entry is {scale[first]:.3g}; was a conjugate or a transpose lost?"
            )
        batch = 0.5 * (batch + batch.conj().swapaxes(1, 2))
        values = np.linalg.eigvalsh(batch)
        bad = np.flatnonzero(values[:, 0] < -4 * n * U32 * values[:, -1].clip(min=0))
        if bad.size:
            first = int(bad[0])
            raise InputError(
                f"matrix {start + first} is indefinite: eigenvalues from {values[first, 0]:.6g} to "
                f"{values[first, -1]:.6g}; a SAR matrix is positive semidefinite"
            )
        out[start : start + len(batch)] = round_outward(pack(batch))
    if not (out[:, :n] > 0).any():
        raise InputError("all matrices are zero; there is no SAR to bound")
    return out
