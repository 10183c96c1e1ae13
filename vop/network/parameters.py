"""S, Z and Y matrices of N ports with real reference impedances, at one frequency.

Waves are power waves with real Z0 (Kurokawa, IEEE Trans Microw Theory Tech 1965;13:194, where they
coincide with travelling waves): |a_c|² is the forward power at port c in watts. With rms phasors
√Z0 (a + b) is the voltage and (a − b)/√Z0 the current; peak phasors are √2 times those.
"""

from __future__ import annotations

import numpy as np

from vop.errors import InputError


def checked_s(s: np.ndarray, name: str = "S") -> np.ndarray:
    """``s`` as (N, N) complex128.

    Raises
    ------
    InputError
        Where it is no square matrix of finite numbers.
    """
    s = np.asarray(s)
    if s.ndim != 2 or s.shape[0] != s.shape[1] or s.shape[0] < 1 or s.dtype.kind not in "fciu":
        raise InputError(f"{name} should be a square matrix of numbers, found {s.dtype} {s.shape}")
    s = s.astype(np.complex128)
    if not np.isfinite(s).all():
        raise InputError(f"{name} holds NaN or infinite values")
    return s


def checked_z0(z0_ohm: float | np.ndarray, n: int) -> np.ndarray:
    """Reference impedances as (n,) float64, Ω.

    Raises
    ------
    InputError
        Where they are not real, finite and positive, or not one or n of them.
    """
    z0 = np.asarray(z0_ohm)
    if z0.ndim > 1 or (z0.ndim == 1 and z0.size != n) or z0.dtype.kind not in "fiu":
        raise InputError(f"reference impedance: one real number or {n} of them, found {z0_ohm!r}")
    z0 = np.broadcast_to(z0.astype(np.float64), (n,))
    if not (np.isfinite(z0).all() and (z0 > 0).all()):
        raise InputError(f"reference impedance must be positive and finite (ohm), found {z0_ohm!r}")
    return z0


def s_to_z(s: np.ndarray, z0_ohm: float | np.ndarray) -> np.ndarray:
    """Z = √Z0 (I − S)⁻¹ (I + S) √Z0, Ω, (N, N) complex128.

    Raises
    ------
    InputError
        Where I − S is singular (an open circuit has no Z).
    """
    s = checked_s(s)
    one, root = np.eye(len(s)), np.sqrt(checked_z0(z0_ohm, len(s)))
    return root[:, None] * solve(one - s, one + s, "Z") * root


def s_to_y(s: np.ndarray, z0_ohm: float | np.ndarray) -> np.ndarray:
    """Y = √Z0⁻¹ (I + S)⁻¹ (I − S) √Z0⁻¹, siemens, (N, N) complex128.

    Raises
    ------
    InputError
        Where I + S is singular (a short circuit has no Y).
    """
    s = checked_s(s)
    one, root = np.eye(len(s)), 1 / np.sqrt(checked_z0(z0_ohm, len(s)))
    return root[:, None] * solve(one + s, one - s, "Y") * root


def z_to_s(z_ohm: np.ndarray, z0_ohm: float | np.ndarray) -> np.ndarray:
    """S = (ζ + I)⁻¹ (ζ − I), ζ = √Z0⁻¹ Z √Z0⁻¹, (N, N) complex128; Z in Ω.

    Raises
    ------
    InputError
        Where ζ + I is singular, which no passive Z is.
    """
    z = checked_s(z_ohm, "Z")
    one, root = np.eye(len(z)), 1 / np.sqrt(checked_z0(z0_ohm, len(z)))
    normalised = root[:, None] * z * root
    return solve(normalised + one, normalised - one, "S")


def y_to_s(y_s: np.ndarray, z0_ohm: float | np.ndarray) -> np.ndarray:
    """S = (I + η)⁻¹ (I − η), η = √Z0 Y √Z0, (N, N) complex128; Y in siemens.

    Raises
    ------
    InputError
        Where I + η is singular, which no passive Y is.
    """
    y = checked_s(y_s, "Y")
    one, root = np.eye(len(y)), np.sqrt(checked_z0(z0_ohm, len(y)))
    normalised = root[:, None] * y * root
    return solve(one + normalised, one - normalised, "S")


def solve(matrix: np.ndarray, right: np.ndarray, what: str) -> np.ndarray:
    """matrix⁻¹ right.

    Raises
    ------
    InputError
        Naming ``what`` does not exist, where ``matrix`` is singular to working precision.
    """
    values = np.linalg.svd(matrix, compute_uv=False)
    if not values[-1] > len(matrix) * np.finfo(np.float64).eps * values[0]:
        raise InputError(
            f"{what} does not exist for these ports: the matrix to invert has singular values from "
            f"{values[-1]:.3g} to {values[0]:.3g} (an open or short circuit, or a lossless resonance)"
        )
    return np.linalg.solve(matrix, right)
