"""S-matrices from Touchstone files (an open format), through scikit-rf."""

from __future__ import annotations

import os
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from vop.errors import InputError, PluginError
from vop.storage import require_finite

#: How far, relatively, the nearest frequency of a file may lie from the wanted one.
_FREQUENCY = 1e-3


@dataclass(frozen=True, eq=False)
class Scattering:
    """S of N ports at one frequency, e^{+jωt}.

    matrix : (N, N) complex128, b = S a. z0_ohm : reference impedance, the same at all ports.
    frequency_hz : of the row that was taken.
    """

    matrix: np.ndarray
    z0_ohm: float
    frequency_hz: float


def read_touchstone(path: str | os.PathLike[str], frequency_hz: float) -> Scattering:
    """Read a Touchstone file and take the frequency nearest to ``frequency_hz``.

    Touchstone phasors are e^{+jωt} by definition, the convention of this package.

    Raises
    ------
    PluginError
        Where scikit-rf is not installed.
    InputError
        Where the file cannot be read, has no frequency within 0.1 % of the wanted one, or its ports
        differ in reference impedance.
    """
    try:
        import skrf
    except ImportError as error:
        raise PluginError(
            "Touchstone files need scikit-rf: pip install 'vop[network]' (or scikit-rf)"
        ) from error
    path = Path(path)
    if not path.is_file():
        raise InputError(f"{path}: no such file")
    try:
        network = skrf.Network(str(path))
    except Exception as error:  # a foreign parser may fail in any way
        why = (str(error) or type(error).__name__).splitlines()[0]
        raise InputError(f"{path}: not readable as Touchstone: {why}") from error
    if network.f.size == 0:
        raise InputError(f"{path}: holds no frequency")
    at = int(np.argmin(np.abs(network.f - frequency_hz)))
    found = float(network.f[at])
    if abs(found - frequency_hz) > _FREQUENCY * frequency_hz:
        raise InputError(
            f"{path}: the nearest frequency is {found / 1e6:.6g} MHz, the fields are at "
            f"{frequency_hz / 1e6:.6g} MHz"
        )
    matrix, z0 = network.s[at].astype(np.complex128), network.z0[at]
    require_finite(matrix, str(path))
    if np.ptp(z0.real) > 0 or np.any(z0.imag):
        raise InputError(f"{path}: the ports differ in reference impedance, or it is complex: {z0}")
    return Scattering(matrix, float(z0[0].real), found)
