"""Networks between amplifiers and array: what the array becomes, seen from its new ports.

The fields of an export belong to incident waves a at the array's own ports. Whatever is connected
there, the fields of a new excitation w follow from a = T w, so that Q' = TᴴQT (:mod:`vop.basis`).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from vop.errors import InputError
from vop.network.conditioning import PowerInterval, checked_accuracy, factor_of_inverse
from vop.network.parameters import checked_s, checked_z0, solve


@dataclass(frozen=True, eq=False)
class Feed:
    """Network with M ports towards amplifiers, then N ports towards the array.

    matrix : (M + N, M + N) complex128, S at real ``z0_ohm`` (M + N,), e^{+jωt}.
    """

    matrix: np.ndarray
    n_amplifiers: int
    z0_ohm: np.ndarray

    def __post_init__(self) -> None:
        matrix = checked_s(self.matrix, "S of the feed")
        object.__setattr__(self, "matrix", matrix)
        object.__setattr__(self, "z0_ohm", checked_z0(self.z0_ohm, len(matrix)))
        if not 1 <= self.n_amplifiers < len(matrix):
            raise InputError(
                f"a feed of {len(matrix)} ports cannot have {self.n_amplifiers} towards amplifiers; "
                "at least one port must lead to each side"
            )

    @property
    def n_array(self) -> int:
        """Number of ports towards the array."""
        return len(self.matrix) - self.n_amplifiers


@dataclass(frozen=True, eq=False)
class PortChange:
    """The array at new ports.

    transform : (N, M) complex128, T with a = T w: incident waves at the old ports per new excitation.
    scattering : (M, M) complex128, S at the new ports.
    z0_ohm : (M,) of the new ports.
    factor : bounds on ‖a‖² as a factor on the nominal value, for every w, at the stated accuracy of the
        old S; None where nobody stated one.
    accuracy : bound on the spectral norm of the error of ``scattering``, likewise.
    """

    transform: np.ndarray
    scattering: np.ndarray
    z0_ohm: np.ndarray
    factor: PowerInterval | None = None
    accuracy: float | None = None


def connect(
    s: np.ndarray, z0_ohm: float | np.ndarray, feed: Feed, *, accuracy: float | None = None
) -> PortChange:
    """Connect a feed to all ports of an array.

    The array has b = S a; the feed's array side sends a and receives b. With the feed's S in blocks ee,
    ei, ie, ii (e towards amplifiers, i towards the array): a = (I − S_ii S)⁻¹ S_ie w = T w and
    S' = S_ee + S_ei S T. With S + Δ: T becomes (I − GΔ)⁻¹T, G = (I − S_ii S)⁻¹S_ii, and by the resolvent
    identity S' moves by S_ei (I − S S_ii)⁻¹ Δ (I − GΔ)⁻¹ T.

    Parameters
    ----------
    s : (N, N) at ``z0_ohm``. accuracy : bound δ on ‖Δ‖₂, carried through as an interval.

    Raises
    ------
    InputError
        Where the feed does not fit in ports or reference impedance, the connection resonates without
        loss, or ±δS leaves more than a factor of two in the power of the waves at the array.
    """
    s = checked_s(s)
    n, m = len(s), feed.n_amplifiers
    z0 = checked_z0(z0_ohm, n)
    if feed.n_array != n:
        raise InputError(f"the feed has {feed.n_array} ports towards the array, the array has {n}")
    if not np.allclose(feed.z0_ohm[m:], z0, rtol=1e-12, atol=0):
        raise InputError(
            f"the feed refers to {feed.z0_ohm[m:]} ohm towards the array, S of the array to {z0} ohm; "
            "renormalise one of them"
        )
    ee, ei = feed.matrix[:m, :m], feed.matrix[:m, m:]
    ie, ii = feed.matrix[m:, :m], feed.matrix[m:, m:]
    one = np.eye(n)
    transform = solve(one - ii @ s, ie, "the wave at the array's ports")
    seen = ee + ei @ s @ transform
    factor = new_accuracy = None
    if accuracy is not None:
        delta = checked_accuracy(accuracy)
        g = delta * _norm(solve(one - ii @ s, ii, "the wave at the array's ports"))
        factor = factor_of_inverse(g).require("connecting a network to the array")
        outward = ei @ solve(one - s @ ii, one, "the wave at the array's ports")
        new_accuracy = delta * _norm(outward) * _norm(transform) / (1 - g)
    return PortChange(transform, seen, feed.z0_ohm[:m], factor, new_accuracy)


def feed_of_blocks(blocks: Sequence[np.ndarray | complex], z0_ohm: float) -> Feed:
    """One block per array port, without coupling between them.

    Parameters
    ----------
    blocks : (2, 2) S of a two-port, amplifier side first; or a number, the reflection coefficient of a
        termination that takes the amplifier's place.
    z0_ohm : of all ports.

    Raises
    ------
    InputError
        Where a block is neither, or no port is left to an amplifier.
    """
    parts = [np.asarray(b, dtype=np.complex128) for b in blocks]
    if any(p.shape not in ((), (2, 2)) for p in parts):
        raise InputError("each block should be a 2×2 S-matrix or one reflection coefficient")
    driven = [c for c, p in enumerate(parts) if p.ndim]
    n, m = len(parts), len(driven)
    if m == 0:
        raise InputError("all ports are terminated; none is left to drive")
    matrix = np.zeros((m + n, m + n), np.complex128)
    for c, part in enumerate(parts):
        if part.ndim:
            at = [driven.index(c), m + c]
            matrix[np.ix_(at, at)] = part
        else:
            matrix[m + c, m + c] = part
    return Feed(matrix, m, np.full(m + n, float(z0_ohm)))


#: A two-port that is not there.
THROUGH = np.array([[0.0, 1.0], [1.0, 0.0]], dtype=np.complex128)


def terminate(
    s: np.ndarray, z0_ohm: float, impedances_ohm: Mapping[int, complex], *, accuracy: float | None = None
) -> PortChange:
    """Close some ports with impedances and drive the others as before.

    Parameters
    ----------
    s : (N, N) of all ports at one real ``z0_ohm``.
    impedances_ohm : 0-based port to impedance; infinity is an open circuit, 0 a short.

    Returns
    -------
    PortChange whose columns are the driven ports in their old order.

    Raises
    ------
    InputError
        As :func:`connect`; where a port does not exist or an impedance has a negative resistance.
    """
    s = checked_s(s)
    blocks: list[np.ndarray | complex] = [THROUGH] * len(s)
    for port, impedance in impedances_ohm.items():
        if not 0 <= port < len(s):
            raise InputError(f"port {port} to terminate: ports are numbered 0 to {len(s) - 1}")
        blocks[port] = reflection(impedance, z0_ohm)
    return connect(s, z0_ohm, feed_of_blocks(blocks, z0_ohm), accuracy=accuracy)


def reflection(impedance_ohm: complex, z0_ohm: float) -> complex:
    """Γ = (Z − Z0)/(Z + Z0) of a passive impedance; 1 for infinity.

    Raises
    ------
    InputError
        Where the resistance is negative or the value is NaN.
    """
    z = complex(impedance_ohm)
    if np.isinf(z):
        return 1.0
    if not z.real >= 0:
        raise InputError(f"impedance {z} ohm: a termination is passive, its resistance must be ≥ 0")
    return (z - z0_ohm) / (z + z0_ohm)


def shift_reference_plane(
    s: np.ndarray, z0_ohm: float, phase_rad: np.ndarray, *, accuracy: float | None = None
) -> PortChange:
    """Move each port's plane away from the array over a matched lossless line.

    Parameters
    ----------
    phase_rad : (N,) electrical length βl of each line, radians; a wave is late by it (e^{−jβl}).

    Returns
    -------
    PortChange with T = diag(e^{−jβl}) and S' = TST.
    """
    s = checked_s(s)
    phase = np.broadcast_to(np.asarray(phase_rad, dtype=np.float64), (len(s),))
    lines: list[np.ndarray | complex] = [np.exp(-1j * p) * THROUGH for p in phase]
    return connect(s, z0_ohm, feed_of_blocks(lines, z0_ohm), accuracy=accuracy)


def renormalise(
    s: np.ndarray,
    z0_old_ohm: float | np.ndarray,
    z0_new_ohm: float | np.ndarray,
    *,
    accuracy: float | None = None,
) -> PortChange:
    """The same ports with other reference impedances, that is, all other ports closed with others.

    Equal voltage and current on both sides of the plane give, with r = √(Z_old/Z_new), p = (r + 1/r)/2
    and q = (r − 1/r)/2, a' = pa + qb and b' = qa + pb: a junction of two lines, connected as any feed.
    """
    s = checked_s(s)
    n = len(s)
    old, new = checked_z0(z0_old_ohm, n), checked_z0(z0_new_ohm, n)
    r = np.sqrt(old / new)
    p, q = 0.5 * (r + 1 / r), 0.5 * (r - 1 / r)
    matrix = np.block([[np.diag(q / p), np.diag(1 / p)], [np.diag(1 / p), np.diag(-q / p)]])
    return connect(s, old, Feed(matrix, n, np.concatenate([new, old])), accuracy=accuracy)


def accepted_power(s: np.ndarray) -> np.ndarray:
    """I − SᴴS, (n, n) complex128: wᴴ(I − SᴴS)w is the power that all ports accept, W per |w|²."""
    s = checked_s(s)
    return np.eye(len(s)) - s.conj().T @ s


def port_powers(s: np.ndarray) -> np.ndarray:
    """Net power into each port, |a_c|² − |b_c|², as (n, n, n) Hermitian matrices, W per |w|².

    Their sum is :func:`accepted_power`. One alone is indefinite: power may leave by a driven port.
    """
    s = checked_s(s)
    out = -s.conj()[:, :, None] * s[:, None, :]
    at = np.arange(len(s))
    out[at, at, at] += 1.0
    return out


def _norm(matrix: np.ndarray) -> float:
    return float(np.linalg.norm(matrix, 2))
