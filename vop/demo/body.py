"""Invented body parts: balls of concentric tissues."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from vop.demo.layered_sphere import Layer, LayeredSphere
from vop.errors import InputError

#: Relative permittivity, conductivity (S/m) and density (kg/m³) at about 300 MHz, quoted from memory of
#: the public tissue tables; good enough for invented data only.
TISSUES: dict[str, tuple[float, float, float]] = {
    "marrow": (5.8, 0.03, 1029.0),
    "bone": (13.4, 0.083, 1908.0),
    "cartilage": (46.8, 0.55, 1100.0),
    "fluid": (69.0, 1.52, 1005.0),
    "muscle": (58.2, 0.77, 1090.0),
    "fat": (5.6, 0.04, 911.0),
    "skin": (49.8, 0.64, 1109.0),
}


@dataclass(frozen=True)
class Ball:
    """A layered ball, its centre displaced from the array's by ``shift_m``.

    shells : tissue and thickness in metres from the surface inwards. core : the tissue of what is left.

    Raises
    ------
    InputError
        Where the shells leave no core, or a tissue has no values here.
    """

    name: str = "layered ball, invented"
    radius_m: float = 0.073
    shells: tuple[tuple[str, float], ...] = (
        ("skin", 0.0025),
        ("fat", 0.0050),
        ("muscle", 0.0120),
        ("fluid", 0.0025),
        ("cartilage", 0.0035),
        ("bone", 0.0050),
    )
    core: str = "marrow"
    shift_m: tuple[float, float, float] = (0.0, 0.0, 0.0)

    def __post_init__(self) -> None:
        unknown = {self.core, *(tissue for tissue, _ in self.shells)} - set(TISSUES)
        if unknown:
            raise InputError(f"{self.name}: no values for {sorted(unknown)}; known: {', '.join(TISSUES)}")
        if self.radius_m <= sum(thickness for _, thickness in self.shells):
            raise InputError(f"{self.name}: the shells fill more than the radius of {self.radius_m:g} m")

    def sphere(self, frequency_hz: float) -> LayeredSphere:
        """The layers, innermost first."""
        radius, layers = self.radius_m, []
        for tissue, thickness in self.shells:
            layers.append(Layer(tissue, radius, *TISSUES[tissue]))
            radius -= thickness
        layers.append(Layer(self.core, radius, *TISSUES[self.core]))
        return LayeredSphere(tuple(reversed(layers)), frequency_hz)

    def voxels(self, step_m: float) -> tuple[np.ndarray, np.ndarray]:
        """Voxels take the tissue of their centres.

        Returns
        -------
        (N,) cell centres from the ball's own centre, the same along x, y and z, with a margin of two
        cells of background; and labels (z, y, x) uint8: 0 outside, else 1 + the layer's number.
        """
        half = int(np.ceil(self.radius_m / step_m)) + 2
        axis = (np.arange(-half, half) + 0.5) * step_m
        radius = np.sqrt(axis[:, None, None] ** 2 + axis[None, :, None] ** 2 + axis[None, None, :] ** 2)
        layers = len(self.shells) + 1
        # The frequency does not matter to where the layers are.
        layer = self.sphere(1.0).layer_of(radius)
        return axis, np.where(layer < layers, layer + 1, 0).astype(np.uint8)
