"""Invented arrays: strips and loops of short current elements at irregular places around a body part."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.constants import c as speed_of_light

from vop.demo.layered_sphere import Elements
from vop.errors import InputError

_KINDS = ("strip", "loop")


@dataclass(frozen=True)
class DemoArray:
    """Channels bent to a former, each a row of short elements; where they are depends on ``seed`` alone.

    n_channels : of them, at least 2.
    former_m : least and most distance of a channel from the array's centre.
    kinds : "strip" (sinusoidal current, zero at both ends) or "loop" (uniform current, as with many
        capacitors), taken in turn.
    strip_share, loop_share : length of a strip and radius of a loop, in units of the radius of a disc
        as large as one channel's part of the former.
    element_m : short elements are at most this long.
    loss_ohm : series resistance of each channel; 0 is an array of perfect conductors.
    """

    n_channels: int = 8
    former_m: tuple[float, float] = (0.080, 0.087)
    kinds: tuple[str, ...] = _KINDS
    strip_share: float = 2.2
    loop_share: float = 0.65
    element_m: float = 0.0065
    loss_ohm: float = 0.0
    frequency_hz: float = 297.2e6
    seed: int = 7

    def __post_init__(self) -> None:
        if self.n_channels < 2:
            raise InputError(f"an array has at least 2 channels, got {self.n_channels}")
        if not self.kinds or not set(self.kinds) <= set(_KINDS):
            raise InputError(f"kinds of channels: {' and '.join(_KINDS)}, got {self.kinds}")

    def elements(self) -> tuple[Elements, np.ndarray]:
        """All short elements for a peak current of 1 A in each channel, from the array's centre, and the
        channel of each."""
        rng = np.random.default_rng(self.seed)
        positions, moments, owner = [], [], []
        for c in range(self.n_channels):
            frame = self._frame(c, rng)
            distance = rng.uniform(*self.former_m)
            disc = 2 * distance / np.sqrt(self.n_channels)
            if self.kinds[c % len(self.kinds)] == "strip":
                at, moment = self._strip(distance, self.strip_share * disc)
            else:
                at, moment = self._loop(distance, self.loop_share * disc, rng.uniform(0.7, 1.4))
            positions.append(at @ frame)
            moments.append(moment @ frame)
            owner += [c] * len(at)
        return Elements(np.concatenate(positions), np.concatenate(moments).astype(complex)), np.array(owner)

    def _frame(self, channel: int, rng: np.random.Generator) -> np.ndarray:
        """Rows: two directions along the former and the outward one. A Fibonacci lattice spreads the
        channels; shifting and turning each makes them irregular."""
        height = 0.8 * (1 - (2 * channel + 1) / self.n_channels) + rng.uniform(-0.5, 0.5) / self.n_channels
        angle = np.pi * (1 + 5**0.5) * channel + rng.uniform(-0.7, 0.7) / np.sqrt(self.n_channels)
        ring = np.sqrt(1 - height**2)
        outward = np.array([ring * np.cos(angle), ring * np.sin(angle), height])
        east = np.cross([0.0, 0.0, 1.0], outward) / ring
        north = np.cross(outward, east)
        turn = rng.uniform(-np.pi, np.pi)
        along = np.cos(turn) * east + np.sin(turn) * north
        return np.stack([along, np.cross(outward, along), outward])

    def _strip(self, distance: float, length: float) -> tuple[np.ndarray, np.ndarray]:
        """Positions and moments in the frame of the strip, bent along x around the centre."""
        count = int(np.ceil(length / self.element_m))
        step = length / count
        s = (np.arange(count) + 0.5) * step - length / 2
        k = 2 * np.pi * self.frequency_hz / speed_of_light
        current = np.sin(k * (length / 2 - np.abs(s))) / np.sin(k * length / 2)
        sine, cosine, zero = np.sin(s / distance), np.cos(s / distance), np.zeros(count)
        return (
            distance * np.stack([sine, zero, cosine], 1),
            (step * current)[:, None] * np.stack([cosine, zero, -sine], 1),
        )

    def _loop(self, distance: float, radius: float, stretch: float) -> tuple[np.ndarray, np.ndarray]:
        """A closed oval on the sphere of radius ``distance``, of chords around each position."""
        count = int(np.ceil(2 * np.pi * radius * max(stretch, 1) / self.element_m))
        phi = 2 * np.pi * np.arange(count + 1) / count
        flat = np.stack(
            [radius * stretch * np.cos(phi), radius * np.sin(phi), np.full(count + 1, distance)], 1
        )
        corner = distance * flat / np.linalg.norm(flat, axis=1, keepdims=True)
        # All at one distance, for speed: a chord's middle lies 0.1 mm lower.
        middle = corner[1:] + corner[:-1]
        return distance * middle / np.linalg.norm(middle, axis=1, keepdims=True), np.diff(corner, axis=0)
