"""References of excitation: forward power, accepted power, port voltage, port current.

A reference is a quantity, a plane, Z0 and the state of the other ports. Each quantity is a linear map
of the incident waves, w_q = F_q a, and each F_q is a full matrix as soon as ports couple:

=====================  ============================================  ====================================
quantity               F_q                                           one entry 1, the others 0 means
=====================  ============================================  ====================================
forward power          I                                             other ports closed with Z0
port voltage           c √Z0 (I + S), c = √2 (peak) or 1 (rms)       other ports short-circuited
port current           c (I − S)/√Z0                                 other ports open
accepted power, total  (I − SᴴS)^½, so that ‖w‖² is accepted power   a mixture of ports
… each port alone      diag √(1 − Σ_k |S_kc|²)                       other ports closed with Z0
=====================  ============================================  ====================================
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from vop.errors import ConventionError, InputError
from vop.metadata import PHASORS, REFERENCES, Reference
from vop.network.conditioning import (
    PowerInterval,
    accepted_power_interval,
    checked_accuracy,
    factor_of_inverse,
)
from vop.network.connection import accepted_power
from vop.network.parameters import checked_s, checked_z0, solve

FORWARD, ACCEPTED, VOLTAGE, CURRENT = REFERENCES
#: What |w_c|² = 1 W of accepted power can mean.
ACCEPTED_KINDS = ("total", "each port alone")


@dataclass(frozen=True, eq=False)
class ReferenceChange:
    """Between forward power and another reference.

    transform : (n, n) complex128, T with w_old = T w_new, so that Q_new = TᴴQ_old T.
    reference : the new one.
    factor : what ±δS leaves of the power that the new excitation stands for, as a factor on the nominal
        value; None where nobody stated an accuracy.
    """

    transform: np.ndarray
    reference: Reference
    factor: PowerInterval | None


def from_forward_power(
    quantity: str,
    s: np.ndarray,
    z0_ohm: float,
    *,
    phasor: str | None = None,
    accepted: str | None = None,
    accuracy: float | None = None,
    plane: str = "not stated",
) -> ReferenceChange:
    """A model of forward power becomes one of ``quantity``: a = T w_new, T = F_q⁻¹.

    Parameters
    ----------
    s : (n, n) of the same ports at real ``z0_ohm``.
    phasor : "peak" or "rms" of voltages and currents; no default, it is a factor of two in SAR.
    accepted : one of :data:`ACCEPTED_KINDS`, for accepted power; no default either.
    accuracy : bound δ on the spectral norm of the error of S.

    Raises
    ------
    ConventionError
        Where ``phasor`` or ``accepted`` is needed and missing, or a name is not known.
    InputError
        Where the quantity does not determine the waves (voltages at S = −1, currents at S = 1, accepted
        power at |S| = 1), or ±δS leaves more than a factor of two.
    """
    s = checked_s(s)
    f = _map(quantity, s, z0_ohm, phasor, accepted)
    factor = None if accuracy is None else _factor(quantity, s, accepted, checked_accuracy(accuracy))
    if factor is not None:
        factor.require(f"excitations by {quantity}")
    transform = solve(f, np.eye(len(s)), f"the excitation by {quantity}")
    return ReferenceChange(transform, _reference(quantity, z0_ohm, phasor, accepted, plane), factor)


def to_forward_power(
    quantity: str,
    s: np.ndarray,
    z0_ohm: float,
    *,
    phasor: str | None = None,
    accepted: str | None = None,
    accuracy: float | None = None,
    plane: str = "not stated",
) -> ReferenceChange:
    """A model of ``quantity`` becomes one of forward power: w_old = T a, T = F_q.

    Parameters and errors as :func:`from_forward_power`.
    """
    s = checked_s(s)
    f = _map(quantity, s, z0_ohm, phasor, accepted)
    factor = None
    if accuracy is not None:
        inverse = _factor(quantity, s, accepted, checked_accuracy(accuracy))
        low = 1 / inverse.high if inverse.high < np.inf else 0.0
        factor = PowerInterval(low, 1.0, 1 / inverse.low).require(f"excitations by {quantity}")
    return ReferenceChange(f, _reference(FORWARD, z0_ohm, None, None, plane), factor)


def _map(quantity: str, s: np.ndarray, z0_ohm: float, phasor: str | None, accepted: str | None) -> np.ndarray:
    one, root = np.eye(len(s)), float(np.sqrt(checked_z0(z0_ohm, 1)[0]))
    if quantity == FORWARD:
        return one.astype(np.complex128)
    if quantity in (VOLTAGE, CURRENT):
        if phasor not in PHASORS:
            raise ConventionError(
                f"{quantity}: phasor {phasor!r} is not known; state 'peak' or 'rms', a factor of two in SAR"
            )
        c = np.sqrt(2.0) if phasor == "peak" else 1.0
        return c * root * (one + s) if quantity == VOLTAGE else c / root * (one - s)
    if quantity == ACCEPTED:
        if accepted not in ACCEPTED_KINDS:
            raise ConventionError(
                f"accepted power: {accepted!r} is not known; state {' or '.join(map(repr, ACCEPTED_KINDS))}"
            )
        inside = accepted_power(s)
        if accepted == "total":
            values, vectors = np.linalg.eigh(inside)
            _require_positive(values)
            return (vectors * np.sqrt(values)) @ vectors.conj().T
        _require_positive(inside.diagonal().real)
        return np.diag(np.sqrt(inside.diagonal().real)).astype(np.complex128)
    choices = ", ".join(repr(k) for k in REFERENCES)
    raise ConventionError(f"reference {quantity!r} is not known; choose one of {choices}")


def _require_positive(powers: np.ndarray) -> None:
    if not powers.min() > 0:
        raise InputError(
            f"accepted power: I − SᴴS gives {powers.min():.3g} W per W for some excitation; with no accepted "
            "power there is nothing to refer to (|S| ≥ 1)"
        )


def _factor(quantity: str, s: np.ndarray, accepted: str | None, delta: float) -> PowerInterval:
    """Bounds on what an excitation stands for: ‖a‖² of given voltages or currents, or per accepted watt."""
    one = np.eye(len(s))
    if quantity == FORWARD:
        return PowerInterval(1.0, 1.0, 1.0)
    if quantity in (VOLTAGE, CURRENT):
        # F + c√Z0 Δ = F (I + (I ± S)⁻¹Δ), and equal impedances cancel.
        base = one + s if quantity == VOLTAGE else one - s
        inverse = solve(base, one, f"the excitation by {quantity}")
        return factor_of_inverse(delta * float(np.linalg.norm(inverse, 2)))
    inside = accepted_power(s)
    if accepted == "total":
        # ‖(S+Δ)ᴴ(S+Δ) − SᴴS‖ ≤ δ(2‖S‖ + δ), against the least eigenvalue of I − SᴴS.
        error = delta * (2 * float(np.linalg.norm(s, 2)) + delta)
        h = error / float(np.linalg.eigvalsh(inside)[0])
        return PowerInterval(1 / (1 + h), 1.0, 1 / (1 - h) if h < 1 else np.inf)
    parts = [accepted_power_interval(s, delta, one[c]) for c in range(len(s))]
    low = min(p.nominal / p.high for p in parts)
    high = max(p.nominal / p.low if p.low > 0 else np.inf for p in parts)
    return PowerInterval(low, 1.0, high)


def _reference(
    quantity: str, z0_ohm: float, phasor: str | None, accepted: str | None, plane: str
) -> Reference:
    others = {
        FORWARD: "closed with Z0",
        VOLTAGE: "short-circuited",
        CURRENT: "open",
        ACCEPTED: "closed with Z0" if accepted == "each port alone" else "‖w‖² is total accepted power",
    }[quantity]
    return Reference(
        quantity,
        plane=plane,
        z0_ohm=float(z0_ohm),
        other_ports=others,
        phasor=phasor if quantity in (VOLTAGE, CURRENT) and phasor else "not stated",
    )
