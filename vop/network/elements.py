"""Lumped elements and their two-ports at one frequency, e^{+jωt}."""

from __future__ import annotations

import numpy as np

from vop.errors import InputError


def series_rlc(
    frequency_hz: float, r_ohm: float = 0.0, l_h: float = 0.0, c_f: float | None = None
) -> complex:
    """Z = R + jωL + 1/(jωC), Ω; without a capacitor where ``c_f`` is None; infinite where it is 0.

    Raises
    ------
    InputError
        Where a value is negative or the frequency is not positive.
    """
    _check(frequency_hz, r_ohm=r_ohm, l_h=l_h, c_f=c_f)
    if c_f == 0:
        return complex(np.inf)
    omega = 2 * np.pi * frequency_hz
    return r_ohm + 1j * omega * l_h + (0.0 if c_f is None else 1 / (1j * omega * c_f))


def parallel_rlc(
    frequency_hz: float, r_ohm: float | None = None, l_h: float | None = None, c_f: float = 0.0
) -> complex:
    """Z = 1/(1/R + 1/(jωL) + jωC), Ω; an element that is None is absent; infinite at lossless resonance.

    Raises
    ------
    InputError
        Where a value is negative or the frequency is not positive.
    """
    _check(frequency_hz, r_ohm=r_ohm, l_h=l_h, c_f=c_f)
    if r_ohm == 0 or l_h == 0:
        return 0.0
    omega = 2 * np.pi * frequency_hz
    y = 1j * omega * c_f
    y += 0.0 if r_ohm is None else 1 / r_ohm
    y += 0.0 if l_h is None else 1 / (1j * omega * l_h)
    return complex(np.inf) if y == 0 else 1 / y


def series_two_port(z_ohm: complex, z0_ohm: float) -> np.ndarray:
    """(2, 2) S of an impedance in series: S11 = z/(z + 2), S21 = 2/(z + 2), z = Z/Z0."""
    z = z_ohm / z0_ohm
    return np.array([[z, 2.0], [2.0, z]], dtype=np.complex128) / (z + 2)


def shunt_two_port(y_s: complex, z0_ohm: float) -> np.ndarray:
    """(2, 2) S of an admittance across the line: S11 = −y/(y + 2), S21 = 2/(y + 2), y = Y Z0."""
    y = y_s * z0_ohm
    return np.array([[-y, 2.0], [2.0, -y]], dtype=np.complex128) / (y + 2)


def cascade(first: np.ndarray, second: np.ndarray) -> np.ndarray:
    """(2, 2) S of two two-ports, the second port of the first joined to the first of the second."""
    a, b = np.asarray(first), np.asarray(second)
    loop = 1 - a[1, 1] * b[0, 0]
    return np.array(
        [
            [a[0, 0] + a[0, 1] * b[0, 0] * a[1, 0] / loop, a[0, 1] * b[0, 1] / loop],
            [b[1, 0] * a[1, 0] / loop, b[1, 1] + b[1, 0] * a[1, 1] * b[0, 1] / loop],
        ],
        dtype=np.complex128,
    )


def _check(frequency_hz: float, **values: float | None) -> None:
    if not (np.isfinite(frequency_hz) and frequency_hz > 0):
        raise InputError(f"frequency {frequency_hz} Hz must be positive")
    for name, value in values.items():
        if value is not None and not (np.isfinite(value) and value >= 0):
            raise InputError(f"{name} = {value}: an element's value must be finite and ≥ 0")
