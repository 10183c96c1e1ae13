"""S-matrices from Touchstone files (an open format), through scikit-rf."""

from __future__ import annotations

import os
import warnings
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from vop.errors import InputError, PluginError
from vop.storage import require_finite

#: How far, relatively, the nearest frequency of a file may lie from the wanted one: the phase of a
#: resonator of quality factor 200 turns by 0.04 rad over it.
_FREQUENCY = 1e-4
#: Largest singular value of the S-matrix of a passive array, with room for the error of a simulation.
_PASSIVE = 1.05


@dataclass(frozen=True, eq=False)
class Scattering:
    """S of N ports at one frequency, e^{+jωt}.

    matrix : (N, N) complex128, b = S a; column c is the response to port c driven.
    z0_ohm : reference impedance, real, the same at all ports.
    frequency_hz : of the row that was taken.
    accuracy : bound on the spectral norm of the error of ``matrix``, or None where nobody stated one.
    """

    matrix: np.ndarray
    z0_ohm: float
    frequency_hz: float
    accuracy: float | None = None


def read_touchstone(
    path: str | os.PathLike[str], frequency_hz: float, *, accuracy: float | None = None
) -> Scattering:
    """Read a Touchstone file and take the frequency nearest to ``frequency_hz``.

    Touchstone phasors are e^{+jωt} by definition, the convention of this package. Y and Z parameters
    are converted. No frequency is interpolated.

    Parameters
    ----------
    accuracy : bound on the spectral norm of the error of S; Touchstone files cannot state it.

    Raises
    ------
    PluginError
        Where scikit-rf is not installed.
    InputError
        Where the file cannot be read, has no frequency or two within 0.01 % of the wanted one at equal
        distance, its ports differ in reference impedance, or S is far from passive.
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
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # what matters in them is checked below
            network = skrf.Network(str(path))
    except Exception as error:  # a foreign parser may fail in any way
        why = (str(error) or type(error).__name__).splitlines()[0]
        raise InputError(f"{path}: not readable as Touchstone: {why}") from error
    if network.f.size == 0:
        raise InputError(f"{path}: holds no frequency")
    require_finite(network.f, f"{path}: the list of frequencies")
    distance = np.abs(network.f - frequency_hz)
    at = int(np.argmin(distance))
    found = float(network.f[at])
    if distance[at] > _FREQUENCY * frequency_hz:
        raise InputError(
            f"{path}: the nearest frequency is {found / 1e6:.6g} MHz, the fields are at "
            f"{frequency_hz / 1e6:.6g} MHz; S near resonance must not be interpolated from afar: "
            "export it at the frequency of the fields"
        )
    if (distance == distance[at]).sum() > 1:
        raise InputError(f"{path}: two rows are as near to {frequency_hz / 1e6:.6g} MHz; keep one")
    matrix, z0 = network.s[at].astype(np.complex128), network.z0[at]
    require_finite(matrix, str(path))
    if np.ptp(z0.real) > 0 or np.any(z0.imag) or not z0[0].real > 0:
        raise InputError(
            f"{path}: the ports differ in reference impedance, or it is not real and positive: {z0}"
        )
    largest = float(np.linalg.norm(matrix, 2))
    if largest > _PASSIVE:
        raise InputError(
            f"{path}: S has a singular value of {largest:.4g}; a passive array has none above 1: "
            "check the format (RI, MA, dB) and the order of ports"
        )
    return Scattering(matrix, float(z0[0].real), found, accuracy)
