"""The one place that knows how Hermitian n×n matrices are packed as n² reals.

A packed row holds, in this order,

* the n real diagonal entries,
* the real parts of the strict upper triangle, row by row, m = n(n−1)/2 of them,
* the imaginary parts of the strict upper triangle, in the same order.

``packed`` arrays have shape (..., n²). Nothing outside this module may rely on that order; kernels
that need single entries call :func:`unpack_row` and :func:`pack_row`, which numba inlines.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit, prange

from vop.errors import InputError

#: Unit roundoff of float32 and float64 (round to nearest).
U32 = 2.0**-24
U64 = 2.0**-53


def channels_from_width(width: int) -> int:
    """Number of channels n of a packed row of n² reals.

    Raises
    ------
    InputError
        If ``width`` is not a positive square.
    """
    n = math.isqrt(width) if width > 0 else 0
    if n < 1 or n * n != width:
        raise InputError(f"packed width {width} is not n² for any number of channels n ≥ 1")
    return n


def pack(matrices: np.ndarray, dtype: np.dtype | type = np.float64) -> np.ndarray:
    """Pack Hermitian matrices; only the diagonal's real part and the upper triangle are read.

    Parameters
    ----------
    matrices : (..., n, n) complex array, Hermitian.
    dtype : real dtype of the result; plain rounding (see :func:`round_outward` for the safe one).

    Returns
    -------
    (..., n²) array of ``dtype``.
    """
    matrices = np.asarray(matrices)
    n = matrices.shape[-1]
    upper = matrices[..., *np.triu_indices(n, 1)]
    diagonal = np.diagonal(matrices, axis1=-2, axis2=-1)
    return np.concatenate([diagonal.real, upper.real, upper.imag], axis=-1).astype(dtype)


def unpack(packed: np.ndarray) -> np.ndarray:
    """Inverse of :func:`pack`: (..., n²) reals to (..., n, n) complex128, exactly Hermitian."""
    packed = np.asarray(packed)
    n = channels_from_width(packed.shape[-1])
    m = n * (n - 1) // 2
    rows, columns = np.triu_indices(n, 1)
    values = packed.astype(np.float64)
    out = np.zeros((*packed.shape[:-1], n, n), dtype=np.complex128)
    upper = values[..., n : n + m] + 1j * values[..., n + m :]
    out[..., rows, columns] = upper
    out[..., columns, rows] = upper.conj()
    out[..., np.arange(n), np.arange(n)] = values[..., :n]
    return out


def inner_weights(n: int) -> np.ndarray:
    """Weights g, (n²,) float64, with tr(QX) = Σ g·pack(Q)·pack(X) for Hermitian Q and X."""
    return np.concatenate([np.ones(n), np.full(n * (n - 1), 2.0)])


def pack_covariance(covariance: np.ndarray) -> np.ndarray:
    """Packed functional of X: (..., n²) float64 with ``packed_q @ result`` = tr(QX).

    For one excitation w pass X = w wᴴ, so that the result gives wᴴQw (W/kg).
    """
    covariance = np.asarray(covariance)
    return pack(covariance) * inner_weights(covariance.shape[-1])


def pack_excitations(w: np.ndarray) -> np.ndarray:
    """Packed functionals of excitations, (..., n) complex to (..., n²): ``packed_q @ f`` = wᴴQw."""
    w = np.asarray(w)
    return pack_covariance(w[..., :, None] * w[..., None, :].conj())


def traces(packed: np.ndarray) -> np.ndarray:
    """Traces, (...,) float64, of packed matrices (..., n²)."""
    n = channels_from_width(packed.shape[-1])
    return packed[..., :n].sum(axis=-1, dtype=np.float64)


def identity(n: int) -> np.ndarray:
    """The packed n×n identity, (n²,) float64."""
    return np.concatenate([np.ones(n), np.zeros(n * (n - 1))])


def packed_entries(n: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """What each of the n² packed numbers is: row i, column j (int64) and whether the imaginary part."""
    rows, columns = np.triu_indices(n, 1)
    diagonal = np.arange(n)
    first = np.concatenate([diagonal, rows, rows])
    second = np.concatenate([diagonal, columns, columns])
    imaginary = np.arange(n * n) >= n + len(rows)
    return first, second, imaginary


@njit(cache=True, inline="always")
def unpack_row(row, n, out):
    """Write one packed row (n²,) into ``out`` (n, n) complex128 (numba)."""
    m = n * (n - 1) // 2
    at = n
    for i in range(n):
        out[i, i] = row[i]
        for j in range(i + 1, n):
            value = complex(row[at], row[at + m])
            out[i, j] = value
            out[j, i] = value.conjugate()
            at += 1


@njit(cache=True, inline="always")
def pack_row(matrix, n, row):
    """Write the upper triangle of ``matrix`` (n, n) into a packed row (n²,) (numba)."""
    m = n * (n - 1) // 2
    at = n
    for i in range(n):
        row[i] = matrix[i, i].real
        for j in range(i + 1, n):
            row[at] = matrix[i, j].real
            row[at + m] = matrix[i, j].imag
            at += 1


@njit(cache=True, parallel=True)
def _round_outward(wide, columns, n, out):
    m = n * (n - 1) // 2
    for r in prange(wide.shape[0]):
        packed = wide[r]
        grow = np.zeros(n)
        at = n
        for i in range(n):
            for j in range(i + 1, n):
                error = 0.0
                for k in (at, at + m):
                    value = packed[columns[k]]
                    out[r, k] = np.float32(value)
                    error += abs(np.float64(out[r, k]) - value)
                grow[i] += error
                grow[j] += error
                at += 1
        for i in range(n):
            # The sums above round too: 4n·2⁻⁵³ relative is more than they can lose.
            wanted = packed[columns[i]] + grow[i] * (1.0 + 4.0 * n * U64)
            wanted += abs(wanted) * 2.0 * U64
            rounded = np.float32(wanted)
            if np.float64(rounded) < wanted:
                rounded = np.nextafter(rounded, np.float32(np.inf))
            out[r, i] = rounded
    return out


def round_outward(packed: np.ndarray, columns: np.ndarray | None = None) -> np.ndarray:
    """Round packed float64 matrices to float32 so that none becomes smaller: result ⪰ input.

    Off-diagonal entries are rounded to nearest; each diagonal entry grows by the sum of the moduli
    of the rounding errors of its row and is rounded upward. The difference is then Hermitian with a
    nonnegative dominant diagonal, hence positive semidefinite (Gershgorin).

    Parameters
    ----------
    packed : (N, n²) float64, finite; or wider, where ``columns`` is given.
    columns : (n²,) int64, in which column of ``packed`` each packed number lies.

    Returns
    -------
    (N, n²) float32.
    """
    packed = np.ascontiguousarray(packed, dtype=np.float64)
    if columns is None:
        columns = np.arange(packed.shape[-1])
    n = channels_from_width(columns.size)
    out = np.empty((*packed.shape[:-1], n * n), dtype=np.float32)
    return _round_outward(packed, columns, n, out)
