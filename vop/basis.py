"""Change of basis: the same body and array under other excitations, w_old = T w_new.

Another reference plane, voltages instead of waves, a measured coupling matrix, modes, or fewer
amplifiers than elements (T is n × m): Q' = TᴴQT for local matrices, the overestimation matrix and all
global matrices alike. Order in the semidefinite sense survives a congruence, so that both bounds of a
set carry over in exact arithmetic; rounding does not know that, hence a set must be proved anew.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any, TypeVar

import numpy as np

from vop.errors import InputError
from vop.hermitian import U32, U64, identity, pack, round_outward, unpack
from vop.kernels.congruence import congruence_outward
from vop.metadata import Metadata, Reference
from vop.progress import Progress, silent
from vop.sarmodel import CHUNK_ROWS, SarModel
from vop.vopset import VopSet

_Set = TypeVar("_Set", SarModel, VopSet)

#: Smallest singular value of T relative to the largest below which a warning goes along.
_NEARLY_SINGULAR = 1e-6


def change_basis(
    model_or_set: _Set,
    transform: np.ndarray,
    *,
    reference: Reference,
    channel_names: tuple[str, ...],
    reason: str,
    progress: Progress = silent,
) -> _Set:
    """The model or set for new excitations: w_old = T w_new.

    Local matrices and VOPs become TᴴQT, rounded outward, so that none is below the exact one. Of a set,
    S becomes TᴴST + μI and every VOP gains hI, with h = με/2 a few n·2⁻²⁴ of the largest VOP: what
    float32 rounding of matrices and VOPs can cost, so that the set holds for the model transformed
    likewise, at the same ε. The worst case is the largest that the set itself shows to be attained,
    max_k λmax(A'_k − εS'), from below.

    Parameters
    ----------
    transform : (n, m) complex, T; n is the old number of channels, m the new.
    reference : what the new excitation is; a unit never changes silently.
    channel_names : m names.
    reason : in words, for the record; T is recorded with it.

    Returns
    -------
    A new model or set; ``metadata.details["change_of_basis"]`` lists all changes, oldest first. A set
    carries the warning that it must be proved anew.

    Raises
    ------
    InputError
        Where T does not fit or is not finite, the result overflows float32, or nothing of a set is left
        beyond its overestimation.
    """
    t = _checked(transform, model_or_set.n_channels, channel_names, reason)
    metadata = _metadata(model_or_set.metadata, t, reference, channel_names, reason)
    globals_ = {name: _congruent(g, t) for name, g in model_or_set.global_matrices.items()}
    if isinstance(model_or_set, SarModel):
        return replace(
            model_or_set,
            packed=_transformed(model_or_set.packed, t, 0.0, progress),
            metadata=metadata,
            global_matrices=globals_,
        )
    return _changed_set(model_or_set, t, metadata, globals_, progress)


def _changed_set(
    old: VopSet, t: np.ndarray, metadata: Metadata, globals_: Mapping[str, np.ndarray], progress: Progress
) -> VopSet:
    n, m = t.shape
    epsilon = old.overestimation
    exact = _congruent(old.matrices, t)
    largest = float(np.linalg.eigvalsh(exact)[:, -1].max())
    # Outward rounding adds at most (2√2√(m−1) + 2)·2⁻²⁴ of the norm, once to matrices and once to VOPs; a
    # proof shifts by 2m·2⁻²⁴ at most. The second term is the float64 arithmetic of both.
    traces = float(np.trace(old.matrices, axis1=1, axis2=2).real.max())
    hair = 6 * m * U32 * largest + 64 * n * m * U64 * float(np.linalg.norm(t)) ** 2 * traces
    s = _congruent(old.overestimation_matrix, t)
    shown = float(np.linalg.eigvalsh(exact - epsilon * s)[:, -1].max()) - 1e-12 * largest
    if not shown > 0:
        raise InputError(
            "change of basis: for the new excitations no VOP exceeds its overestimation; the set says "
            "nothing about them: compress the transformed model instead"
        )
    metadata = metadata.with_warnings(
        "the basis of this set was changed after it was made: it must be proved anew against the model "
        "changed in the same way"
    )
    return replace(
        old,
        packed=_transformed(old.packed, t, hair, progress),
        worst_case=shown,
        overestimation_matrix=s + 2 * hair / epsilon * np.eye(m),
        metadata=metadata,
        global_matrices=dict(globals_),
    )


def _transformed(packed: np.ndarray, t: np.ndarray, added: float, progress: Progress) -> np.ndarray:
    n, m = t.shape
    out = np.empty((len(packed), m * m), dtype=np.float32)
    wide = np.empty((min(CHUNK_ROWS, len(packed)), m * m))
    for start in range(0, len(packed), CHUNK_ROWS):
        rows = np.ascontiguousarray(packed[start : start + CHUNK_ROWS])
        part = wide[: len(rows)]
        congruence_outward(rows, n, t, part)
        if not np.abs(part).max() < np.finfo(np.float32).max / (4 * m):
            raise InputError(
                f"change of basis: transformed matrices reach {np.abs(part).max():.3g}, more than float32 "
                "files hold; check the unit of T"
            )
        out[start : start + len(rows)] = round_outward(part + added * identity(m))
        progress("change of basis", min(start + CHUNK_ROWS, len(packed)), len(packed))
    return out


def _congruent(matrices: np.ndarray, t: np.ndarray) -> np.ndarray:
    """TᴴMT in float64, exactly Hermitian."""
    return unpack(pack(t.conj().T @ np.asarray(matrices, dtype=np.complex128) @ t))


def _checked(transform: np.ndarray, n: int, channel_names: tuple[str, ...], reason: str) -> np.ndarray:
    t = np.asarray(transform)
    if t.ndim != 2 or t.shape[0] != n or t.shape[1] < 1 or t.dtype.kind not in "fciu":
        raise InputError(
            f"change of basis: T should be numbers of shape ({n}, m), found {t.dtype} {t.shape}; "
            "w_old = T w_new, one row per old channel"
        )
    t = np.ascontiguousarray(t, dtype=np.complex128)
    if not np.isfinite(t).all():
        raise InputError("change of basis: T holds NaN or infinite values")
    if len(channel_names) != t.shape[1]:
        raise InputError(f"change of basis: {len(channel_names)} channel names for {t.shape[1]} new channels")
    silent_columns = np.flatnonzero(~t.any(axis=0))
    if silent_columns.size:
        raise InputError(
            f"change of basis: new channel {channel_names[silent_columns[0]]} drives nothing, its column of "
            "T is zero"
        )
    if not reason.strip():
        raise InputError("change of basis: state a reason; it goes into the record")
    return t


def _metadata(
    old: Metadata, t: np.ndarray, reference: Reference, channel_names: tuple[str, ...], reason: str
) -> Metadata:
    values = np.linalg.svd(t, compute_uv=False)
    change: dict[str, Any] = {
        "reason": reason,
        "transform_real": t.real.tolist(),
        "transform_imag": t.imag.tolist(),
        "from_quantity": old.reference.quantity,
        "from_plane": old.reference.plane,
        "from_channel_names": list(old.channel_names),
        "singular_values": [float(v) for v in values],
    }
    made = replace(old, reference=reference, channel_names=tuple(channel_names))
    made = made.with_details(change_of_basis=[*old.details.get("change_of_basis", []), change])
    if values[-1] < _NEARLY_SINGULAR * values[0] or t.shape[1] > t.shape[0]:
        made = made.with_warnings(
            f"change of basis ({reason}): T has singular values from {values[-1]:.3g} to {values[0]:.3g} in "
            f"{t.shape[1]} new channels; some excitations drive next to nothing"
        )
    return made
