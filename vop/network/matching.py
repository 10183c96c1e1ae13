"""Matching by calculation: a two-element lossless network (L-section) at every port, one frequency.

D. M. Pozar, Microwave Engineering, chapter "Impedance matching and tuning", section on lumped elements
(L networks); formulas quoted from memory and checked by what they must do (tests/test_network_matching.py).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from vop.errors import InputError
from vop.network.connection import THROUGH, PortChange, connect, feed_of_blocks
from vop.network.elements import cascade, series_two_port, shunt_two_port
from vop.network.parameters import checked_s

#: Largest |S'_cc| that counts as matched, and sweeps over the ports until then.
_MATCHED = 1e-9
_SWEEPS = 500

#: A family of solutions that moves steadily with the load: whether the shunt lies at the load, and the
#: sign of the root.
_Branch = tuple[bool, int]


@dataclass(frozen=True)
class LSection:
    """A reactance in series and a susceptance across the line.

    series_ohm : X, positive an inductor, negative a capacitor.
    shunt_s : B, positive a capacitor, negative an inductor.
    shunt_at_load : whether the shunt lies on the array's side of the series element.
    """

    series_ohm: float
    shunt_s: float
    shunt_at_load: bool

    def two_port(self, z0_ohm: float) -> np.ndarray:
        """(2, 2) S, amplifier side first."""
        series = series_two_port(1j * self.series_ohm, z0_ohm)
        shunt = shunt_two_port(1j * self.shunt_s, z0_ohm)
        return cascade(series, shunt) if self.shunt_at_load else cascade(shunt, series)

    def components(self, frequency_hz: float) -> dict[str, float]:
        """Values of the two parts at a frequency: keys like "series C (F)", "shunt L (H)"."""
        omega = 2 * np.pi * frequency_hz
        x, b = self.series_ohm, self.shunt_s
        out = {}
        if x:
            out["series L (H)" if x > 0 else "series C (F)"] = x / omega if x > 0 else -1 / (omega * x)
        if b:
            out["shunt C (F)" if b > 0 else "shunt L (H)"] = b / omega if b > 0 else -1 / (omega * b)
        return out


@dataclass(frozen=True, eq=False)
class Matched:
    """An array with an L-section at every port.

    sections : one per port. change : T, S' and the interval that ±δS leaves.
    residual : largest |S'_cc|.
    """

    sections: tuple[LSection, ...]
    change: PortChange
    residual: float


def l_sections(load_ohm: complex, z0_ohm: float) -> tuple[LSection, ...]:
    """All L-sections that turn ``load_ohm`` into ``z0_ohm``: two, or four where both orders do.

    Shunt at the load, where |Z_L|² ≥ Z0 R_L: B = (X_L ± √(R_L/Z0) √(R_L² + X_L² − Z0 R_L))/(R_L² + X_L²)
    and X = −Im 1/(1/Z_L + jB). Series at the load, where R_L ≤ Z0: X = ±√(R_L (Z0 − R_L)) − X_L and
    B = ±√((Z0 − R_L)/R_L)/Z0.

    Raises
    ------
    InputError
        Where the load has no positive resistance.
    """
    return tuple(_solutions(load_ohm, z0_ohm).values())


def match_array(
    s: np.ndarray,
    z0_ohm: float,
    *,
    accuracy: float | None = None,
    solutions: Sequence[int] | None = None,
) -> Matched:
    """An L-section at every port so that each sees Z0 while all others are matched and closed with Z0.

    Networks change what their neighbours see; the ports are therefore matched in turn until all
    |S'_cc| ≤ 1e-9. Coupling S'_kc stays: |S'_cc| = 0 does not mean that all power is accepted.

    Parameters
    ----------
    s : (N, N) at ``z0_ohm``. accuracy : bound δ on the spectral norm of the error of S.
    solutions : for each port, which of :func:`l_sections` to take, by index, judged with the bare other
        ports closed by Z0; by default one of two capacitors where there is one (they lose least), else
        the one with the smallest reactances.

    Raises
    ------
    InputError
        Where a port accepts no power, the sweeps do not settle, or ±δS leaves more than a factor of two.
    """
    s = checked_s(s)
    n = len(s)
    branches, sections = [], []
    for c in range(n):
        found = _solutions(_impedance(s[c, c], z0_ohm, c), z0_ohm)
        if solutions is not None and not 0 <= solutions[c] < len(found):
            raise InputError(f"port {c}: solution {solutions[c]} was asked, there are {len(found)}")
        branch = _preferred(found, z0_ohm) if solutions is None else list(found)[solutions[c]]
        branches.append(branch)
        sections.append(found[branch])
    for _ in range(_SWEEPS):
        residual = float(np.abs(_connected(s, z0_ohm, sections).scattering.diagonal()).max())
        if residual <= _MATCHED:
            return Matched(tuple(sections), _connected(s, z0_ohm, sections, accuracy), residual)
        for c in range(n):
            found = _solutions(_impedance(_seen_by(s, z0_ohm, sections, c), z0_ohm, c), z0_ohm)
            if branches[c] not in found:
                raise InputError(
                    f"port {c}: with its neighbours matched, an L-section of the chosen kind no longer "
                    "exists; choose another solution"
                )
            sections[c] = found[branches[c]]
    raise InputError(
        f"matching all ports at once does not settle: |S_cc| is still {residual:.3g} after {_SWEEPS} "
        "sweeps; the coupling is too strong for one network per port"
    )


def _solutions(load_ohm: complex, z0_ohm: float) -> dict[_Branch, LSection]:
    z = complex(load_ohm)
    r, x, z0 = z.real, z.imag, float(z0_ohm)
    if not (np.isfinite(z) and r > 0 and z0 > 0):
        raise InputError(f"load {z} ohm: only a load with a positive resistance can be matched")
    out: dict[_Branch, LSection] = {}
    under = r * r + x * x - z0 * r
    if under >= 0:
        for sign in (1, -1):
            b = (x + sign * np.sqrt(r / z0) * np.sqrt(under)) / (r * r + x * x)
            out[True, sign] = LSection(float(-(1 / (1 / z + 1j * b)).imag), float(b), True)
    if r <= z0:
        for sign in (1, -1):
            series = sign * np.sqrt(r * (z0 - r)) - x
            out[False, sign] = LSection(float(series), float(sign * np.sqrt((z0 - r) / r) / z0), False)
    return out


def _preferred(found: dict[_Branch, LSection], z0_ohm: float) -> _Branch:
    def rank(branch: _Branch) -> tuple[bool, float]:
        part = found[branch]
        capacitors = part.series_ohm <= 0 <= part.shunt_s
        return not capacitors, abs(part.series_ohm) / z0_ohm + abs(part.shunt_s) * z0_ohm

    return min(found, key=rank)


def _impedance(reflection: complex, z0_ohm: float, port: int) -> complex:
    if not abs(reflection) < 1:
        raise InputError(
            f"port {port} reflects |S| = {abs(reflection):.6g} with the others closed; it accepts no power, "
            "no lossless network matches it"
        )
    return z0_ohm * (1 + reflection) / (1 - reflection)


def _seen_by(s: np.ndarray, z0_ohm: float, sections: Sequence[LSection], port: int) -> complex:
    """Reflection of one bare array port while the others have their networks, closed with Z0."""
    blocks = [THROUGH if c == port else part.two_port(z0_ohm)[1, 1] for c, part in enumerate(sections)]
    return complex(connect(s, z0_ohm, feed_of_blocks(blocks, z0_ohm)).scattering[0, 0])


def _connected(
    s: np.ndarray, z0_ohm: float, sections: Sequence[LSection], accuracy: float | None = None
) -> PortChange:
    blocks = [part.two_port(z0_ohm) for part in sections]
    return connect(s, z0_ohm, feed_of_blocks(blocks, z0_ohm), accuracy=accuracy)
