"""An invented array: bent current elements at irregular places around a ball-shaped body part."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.constants import c as speed_of_light
from scipy.constants import mu_0
from scipy.linalg import sqrtm

from vop.demo.layered_sphere import Elements, Layer, LayeredSphere, Solution, free_space_field

#: Values at about 300 MHz, quoted from memory of the public tissue tables; good enough for a demo only.
_TISSUES = {
    "marrow": (5.8, 0.03, 1029.0),
    "bone": (13.4, 0.083, 1908.0),
    "cartilage": (46.8, 0.55, 1100.0),
    "fluid": (69.0, 1.52, 1005.0),
    "muscle": (58.2, 0.77, 1090.0),
    "fat": (5.6, 0.04, 911.0),
    "skin": (49.8, 0.64, 1109.0),
}


@dataclass(frozen=True)
class DemoArray:
    """Channels of bent strips with a sinusoidal current, each a row of short elements.

    n_channels : number of strips. radius_m : of the body part. gap_m : least and most distance from skin.
    length_m : of a strip. n_elements : short elements per strip. seed : of the irregular placing.
    """

    n_channels: int = 8
    radius_m: float = 0.073
    gap_m: tuple[float, float] = (0.012, 0.014)
    length_m: float = 0.140
    n_elements: int = 14
    frequency_hz: float = 297.2e6
    seed: int = 7

    def sphere(self) -> LayeredSphere:
        """The layered ball: a joint-like core under muscle, fat and skin; thicknesses in mm."""
        thickness = (
            ("skin", 2.5),
            ("fat", 5.0),
            ("muscle", 12.0),
            ("fluid", 2.5),
            ("cartilage", 3.5),
            ("bone", 5.0),
        )
        radius, layers = self.radius_m, []
        for name, mm in thickness:
            layers.append(Layer(name, radius, *_TISSUES[name]))
            radius -= 1e-3 * mm
        layers.append(Layer("marrow", radius, *_TISSUES["marrow"]))
        return LayeredSphere(tuple(reversed(layers)), self.frequency_hz)

    def elements(self) -> tuple[Elements, np.ndarray]:
        """All short elements for a peak current of 1 A in each strip, and the channel of each."""
        rng = np.random.default_rng(self.seed)
        positions, moments = [], []
        # A Fibonacci lattice spreads the strips; turning and shifting each makes them irregular.
        number = np.arange(self.n_channels)
        height = 0.75 * (1 - (2 * number + 1) / self.n_channels)
        angle = np.pi * (1 + 5**0.5) * number + rng.uniform(-0.25, 0.25, self.n_channels)
        ring = np.sqrt(1 - height**2)
        k = 2 * np.pi * self.frequency_hz / speed_of_light
        for c in range(self.n_channels):
            outward = np.array([ring[c] * np.cos(angle[c]), ring[c] * np.sin(angle[c]), height[c]])
            east = np.cross([0.0, 0.0, 1.0], outward)
            east /= np.linalg.norm(east)
            turn = rng.uniform(-np.pi, np.pi)
            along = np.cos(turn) * east + np.sin(turn) * np.cross(outward, east)
            distance = self.radius_m + rng.uniform(*self.gap_m)
            step = self.length_m / self.n_elements
            s = (np.arange(self.n_elements) + 0.5) * step - self.length_m / 2
            bend = s / distance
            current = np.sin(k * (self.length_m / 2 - np.abs(s))) / np.sin(k * self.length_m / 2)
            positions.append(distance * (np.cos(bend)[:, None] * outward + np.sin(bend)[:, None] * along))
            direction = -np.sin(bend)[:, None] * outward + np.cos(bend)[:, None] * along
            moments.append(step * current[:, None] * direction)
        owner = np.repeat(number, self.n_elements)
        return Elements(np.concatenate(positions), np.concatenate(moments).astype(complex)), owner


def resistance_matrix(solution: Solution, elements: Elements, owner: np.ndarray) -> np.ndarray:
    """R of the strips, (C, C) real symmetric, Ω: accepted power is ½ IᴴRI, radiated plus absorbed.

    The strips are free of loss, so that what their currents give off (−½ Re ∫ E·J*) is all of it. E is
    the free-space field, whose real part on the element itself is the radiation resistance of a short
    dipole (ωμ0k/6π), plus what the sphere sends back.
    """
    sphere, count = solution.sphere, len(elements.position_m)
    back = solution.field(elements, np.arange(count), count, elements.position_m, scattered=True)
    with np.errstate(divide="ignore", invalid="ignore"):
        direct = free_space_field(sphere.k0, sphere.omega, elements, elements.position_m)
    own = -sphere.omega * mu_0 * sphere.k0 / (6 * np.pi) * elements.moment
    direct[np.arange(count), :, np.arange(count)] = own
    between = -np.einsum("ia,jai->ij", elements.moment.conj(), back + direct).real
    channels = int(owner.max()) + 1
    r = np.zeros((channels, channels))
    np.add.at(r, (owner[:, None], owner[None, :]), 0.5 * (between + between.T))
    return r


def decoupled_currents(resistance: np.ndarray) -> np.ndarray:
    """(C, C) T with I = T w and accepted power wᴴw: T = (R/2)^(−1/2).

    A lossless network that matches and decouples the strips: the S-matrix at its plugs is zero, forward
    power is accepted power, and each plug still drives mostly its own strip.
    """
    return np.linalg.inv(np.real(sqrtm(0.5 * resistance)))
