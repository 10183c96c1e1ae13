"""What the currents of an array cost in watts, and a network that makes forward power of it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from vop.demo.layered_sphere import Elements, Solution


@dataclass(frozen=True, eq=False)
class ArrayPower:
    """Where the power of the channels' currents I (A, peak) goes: IᴴPI watts each.

    absorbed_w, radiated_w, lost_w : (C, C) complex128, Hermitian positive semidefinite, W/A²; absorbed in
        the body, radiated, and lost in the channels themselves.
    """

    absorbed_w: np.ndarray
    radiated_w: np.ndarray
    lost_w: np.ndarray

    @classmethod
    def of(
        cls, solution: Solution, elements: Elements, owner: np.ndarray, loss_ohm: float = 0.0
    ) -> ArrayPower:
        """In closed form, from the amplitudes of the solver's modes; each channel has a series resistance."""
        channels = int(np.max(owner)) + 1
        return cls(
            solution.power_matrix("absorbed", elements, owner, channels),
            solution.power_matrix("radiated", elements, owner, channels),
            0.5 * loss_ohm * np.eye(channels, dtype=np.complex128),
        )

    def under(self, drive: np.ndarray) -> ArrayPower:
        """The same for excitations w that make the currents ``drive`` · w."""
        parts = (self.absorbed_w, self.radiated_w, self.lost_w)
        return ArrayPower(*(drive.conj().T @ part @ drive for part in parts))

    def decoupled_currents(self) -> np.ndarray:
        """T, (C, C): currents Tw take wᴴw watts in all; T = P^(−1/2), P the sum of the three.

        A lossless network matches and decouples the channels. At its plugs the S-matrix is zero, so
        that forward power is accepted power; of all such networks this one keeps each plug closest to
        its own channel (Löwdin's symmetric orthogonalisation).
        """
        values, vectors = np.linalg.eigh(self.absorbed_w + self.radiated_w + self.lost_w)
        return (vectors / np.sqrt(values)) @ vectors.conj().T
