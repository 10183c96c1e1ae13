"""What a compression method gets and gives; everything else is the business of :func:`compress`."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np

from vop.compression.checkpoint import Checkpoint
from vop.progress import Progress


class TooManyVops(Exception):
    """Raised by a method as soon as it knows that it needs more than ``Problem.limit`` VOPs."""


@dataclass(frozen=True, eq=False)
class Problem:
    """N matrices and a bound, in coordinates where the overestimation matrix is the identity.

    packed : (N, n²) float32, order of :mod:`vop.hermitian`, finite; array or read-only memory map.
        Where S is no multiple of the identity these are congruence-transformed (S → 1).
    n : channels.
    bound : ε' > 0, absolute, in the unit of ``packed`` (W/kg); the overestimation matrix is bound·1.
    worst : scale of ``packed``: its largest λmax is at least this, and above it by rounding only.
    tolerance : absolute; inequalities may fail by this much in eigenvalue (float64 rounding stays far
        below it). The caller has put it into the hair between ε' and ε, see :mod:`~.bound`.
    limit : raise :class:`TooManyVops` where more are needed; None for no limit.
    """

    packed: np.ndarray
    n: int
    bound: float
    worst: float
    tolerance: float
    limit: int | None = None
    checkpoint: Checkpoint = field(default_factory=Checkpoint)


@dataclass(frozen=True, eq=False)
class CompressionResult:
    """K delivered matrices, before the hair is added and before rounding to storage.

    delivered : (K, n²) float64 packed. Every Q_v ⪯ Σ c_k delivered_k + tolerance·1 for some c in the
        simplex, and delivered_k ⪯ core_k + (bound + tolerance)·1 where core_k is a matrix of the
        problem or a convex combination of such.
    core_index : (K,) int64, row of the core, −1 where the core is no single member.
    details : plain JSON values for the record; nothing that differs between two equal runs.
    """

    delivered: np.ndarray
    core_index: np.ndarray
    details: Mapping[str, Any] = field(default_factory=dict)


class Method(Protocol):
    """A method is a function ``run`` in a module listed in :data:`vop.compression.METHODS`.

    It gives the same result for any number of threads, decides in float64 kernels of fixed order,
    breaks ties by the lower row, and reports ``progress(label, matrices done, N)``.
    """

    def __call__(self, problem: Problem, progress: Progress) -> CompressionResult: ...
