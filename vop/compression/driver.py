"""``compress``: from a model to a set, by any of the methods."""

from __future__ import annotations

import importlib
import math
import os
from dataclasses import dataclass

import numpy as np

from vop import __version__
from vop.compression.bound import (
    LEAST_WORST_CASE,
    Coordinates,
    frobenius,
    overestimation_row,
    worst_case,
)
from vop.compression.checkpoint import Checkpoint
from vop.compression.contract import CompressionResult, Method, Problem, TooManyVops
from vop.errors import InputError
from vop.hermitian import U32, unpack
from vop.metadata import digest
from vop.progress import Progress, silent
from vop.sarmodel import SarModel
from vop.vopset import VopSet

#: Name of a method and the module that holds its ``run`` (:class:`~.contract.Method`).
METHODS = {
    "clustering": "vop.compression.clustering",
    "clustering-free": "vop.compression.clustering_free",
}

#: With ``max_vops``: ε grows by this factor until it suffices, then is narrowed to this precision.
_GROW, _NARROW = 2.0, 1.02


def compress(
    model: SarModel,
    overestimation: float = 0.05,
    method: str = "clustering",
    *,
    overestimation_matrix: np.ndarray | None = None,
    max_vops: int | None = None,
    bound_w_kg: float | None = None,
    progress: Progress = silent,
    checkpoint: str | os.PathLike[str] | None = None,
) -> VopSet:
    """Reduce the local matrices of ``model`` to VOPs that never underestimate local SAR.

    Every Q_v ⪯ Σ c_k A_k for some c in the simplex, and every A_k ⪯ (convex combination of Q) + εS;
    both hold for the float32 numbers delivered, and for the float64 matrices that those of the model
    were rounded from.

    Parameters
    ----------
    overestimation : ε, a fraction, 0 < ε < 1; 0.05 is 5 %.
    method : a key of :data:`METHODS`.
    overestimation_matrix : (n, n) Hermitian positive definite S, W/kg per |w|²; None is the identity
        times the worst case (largest λmax of the model), so that ε is a fraction of worst-case SAR.
    max_vops : if more would be needed at ``overestimation``, the bound is raised until that many
        suffice (to 2 %); the set records the bound that it holds.
    bound_w_kg : absolute bound in W/kg per |w|², in place of ``overestimation``; S is then the
        identity times the worst case.
    checkpoint : file that keeps the state of a long run; the same call finds it and goes on to the
        same result; removed at the end.

    Returns
    -------
    VopSet; ``metadata.details["compression"]`` records how it was made.

    Raises
    ------
    InputError
        Where an argument is out of range, the model holds NaN, infinity or nothing but zeros, or S
        is no positive definite matrix or too ill-conditioned for float32.
    OutputError
        Where the checkpoint cannot be written.

    References
    ----------
    See the module of each method for its published source.
    """
    run = _method(method)
    n = model.n_channels
    norms = frobenius(model.packed)
    if not norms.max() > 0:
        raise InputError("all matrices of the model are zero; there is no SAR to bound")
    worst, worst_row = worst_case(model.packed, norms)
    if not LEAST_WORST_CASE < worst < float(np.finfo(np.float32).max) / (8 * n):
        raise InputError(
            f"the worst case is {worst:.3g} {model.metadata.matrix_unit} (matrix {worst_row}), "
            "outside what float32 files hold with full precision; check the units"
        )
    epsilon = _epsilon(overestimation, bound_w_kg, overestimation_matrix, worst)
    limit = _limit(max_vops)
    s_row = overestimation_row(overestimation_matrix, n, worst)
    model_digest = model.digest()
    key = digest(__version__, model_digest, method, s_row.tobytes())
    saved = Checkpoint(checkpoint, key)
    task = _Task(run, model.packed, n, s_row, worst, saved, progress)
    answer = task.at(epsilon, None) if limit is None else _fewest_bound(task, epsilon, limit)
    record = {
        "method": method,
        "n_matrices": len(model),
        "n_vops": len(answer.packed),
        "overestimation": answer.epsilon,
        "hair": answer.epsilon - answer.coordinates.epsilon_prime,
        "worst_case_row": worst_row,
        "overestimation_matrix": "worst case times identity" if overestimation_matrix is None else "given",
        "model_digest": model_digest,
        **answer.result.details,
    }
    if limit is not None:
        record.update(max_vops=limit, overestimation_asked=epsilon)
    saved.remove()
    return VopSet(
        packed=answer.packed,
        overestimation=answer.epsilon,
        worst_case=worst,
        overestimation_matrix=unpack(s_row),
        core_index=np.ascontiguousarray(answer.result.core_index, dtype=np.int64),
        method=method,
        metadata=model.metadata.with_details(compression=record),
        global_matrices=model.global_matrices,
        global_units=model.global_units,
    )


@dataclass(frozen=True, eq=False)
class _Answer:
    epsilon: float
    coordinates: Coordinates
    result: CompressionResult
    packed: np.ndarray


@dataclass(frozen=True, eq=False)
class _Task:
    run: Method
    packed: np.ndarray
    n: int
    s_row: np.ndarray
    worst: float
    checkpoint: Checkpoint
    progress: Progress

    def at(self, epsilon: float, limit: int | None) -> _Answer:
        coordinates = Coordinates.of(self.packed, epsilon, self.s_row, self.worst)
        bound = coordinates.epsilon_prime * coordinates.scale
        problem = Problem(
            packed=coordinates.packed,
            n=self.n,
            bound=bound,
            worst=coordinates.worst,
            tolerance=0.5 * coordinates.delta * coordinates.scale,
            limit=limit,
            checkpoint=self.checkpoint.for_bound(bound),
        )
        result = self.run(problem, self.progress)
        return _Answer(epsilon, coordinates, result, coordinates.back(result.delivered))


def _fewest_bound(task: _Task, epsilon: float, limit: int) -> _Answer:
    """The answer at ``epsilon`` if it has at most ``limit`` VOPs, else at about the least ε that has."""
    low, high, answer = epsilon, epsilon, None
    while answer is None:
        try:
            answer = task.at(high, limit)
        except TooManyVops:
            low, high = high, high * _GROW
    while high > low * _NARROW:
        middle = math.sqrt(low * high)
        try:
            answer, high = task.at(middle, limit), middle
        except TooManyVops:
            low = middle
    return answer


def _method(name: str) -> Method:
    if name not in METHODS:
        choices = ", ".join(repr(k) for k in METHODS)
        raise InputError(f"method {name!r} is not known; choose one of {choices}")
    run: Method = importlib.import_module(METHODS[name]).run
    return run


def _epsilon(
    overestimation: float, bound_w_kg: float | None, matrix: np.ndarray | None, worst: float
) -> float:
    if bound_w_kg is not None:
        if matrix is not None:
            raise InputError("bound_w_kg is a bound on its own; leave overestimation_matrix out")
        value = _number("bound_w_kg", bound_w_kg)
        if not worst * U32 < value < worst:
            raise InputError(
                f"bound_w_kg {value:g} should lie between 0 and the worst case, {worst:.6g} W/kg"
            )
        return value / worst
    value = _number("overestimation", overestimation)
    if not 0 < value < 1:
        hint = f"; for {value:g} % say {value / 100:g}" if 1 <= value < 100 else ""
        raise InputError(f"overestimation {value:g} should be a fraction between 0 and 1{hint}")
    return value


def _number(name: str, value: object) -> float:
    try:
        number = float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        raise InputError(f"{name} {value!r} is not a number") from None
    if not math.isfinite(number):
        raise InputError(f"{name} {number} is not a finite number")
    return number


def _limit(max_vops: int | None) -> int | None:
    if max_vops is None:
        return None
    if isinstance(max_vops, bool) or not isinstance(max_vops, (int, np.integer)) or max_vops < 1:
        raise InputError(f"max_vops {max_vops!r} should be a whole number of at least 1")
    return int(max_vops)
