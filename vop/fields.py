"""Fields of an array around a body, as every reader hands them over.

A reader subclasses :class:`FieldSource` and implements :meth:`FieldSource.read_raw_electric`; this
module turns raw values into the one convention of the house: peak phasors, e^{+jωt}, V/m per unit
excitation.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from vop.errors import InputError
from vop.grid import Box, RectilinearGrid
from vop.metadata import Conventions

#: Where an export samples E, and which samples of each component belong to one cell, as offsets
#: (z, y, x) from the cell's own index. Nodes and edges have one more sample along an axis.
SAMPLES: dict[str, tuple[tuple[tuple[int, int, int], ...], ...]] = {
    "cell": (((0, 0, 0),),) * 3,
    "node": (tuple((k, j, i) for k in (0, 1) for j in (0, 1) for i in (0, 1)),) * 3,
    "edge": (
        tuple((k, j, 0) for k in (0, 1) for j in (0, 1)),
        tuple((k, 0, i) for k in (0, 1) for i in (0, 1)),
        tuple((0, j, i) for j in (0, 1) for i in (0, 1)),
    ),
}


@dataclass(frozen=True, eq=False)
class Tissue:
    """Tissue by voxel.

    conductivity_s_m, density_kg_m3 : (nz, ny, nx) float32; density 0 marks background.
    label : (nz, ny, nx) unsigned integers, 0 = background, or None.
    names : tissue name by label.

    Raises
    ------
    InputError
        On unequal shapes, NaN, negative values, or conductivity where the density is zero.
    """

    conductivity_s_m: np.ndarray
    density_kg_m3: np.ndarray
    label: np.ndarray | None = None
    names: Mapping[int, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        sigma = np.asarray(self.conductivity_s_m, dtype=np.float32)
        rho = np.asarray(self.density_kg_m3, dtype=np.float32)
        object.__setattr__(self, "conductivity_s_m", sigma)
        object.__setattr__(self, "density_kg_m3", rho)
        if sigma.ndim != 3 or sigma.shape != rho.shape:
            raise InputError(f"tissue: conductivity {sigma.shape} and density {rho.shape} differ in shape")
        if self.label is not None and self.label.shape != rho.shape:
            raise InputError(f"tissue: label {self.label.shape} and density {rho.shape} differ in shape")
        for name, values in (("conductivity (S/m)", sigma), ("density (kg/m³)", rho)):
            bad = ~np.isfinite(values) | (values < 0)
            if bad.any():
                at = tuple(int(i) for i in np.argwhere(bad)[0])
                raise InputError(
                    f"tissue: {name} is {values[at]} at voxel [z, y, x] = {list(at)}"
                    f"{self._naming(at)} ({int(bad.sum())} such voxels); it must be finite and ≥ 0"
                )
        bad = (sigma > 0) & (rho == 0)
        if bad.any():
            at = tuple(int(i) for i in np.argwhere(bad)[0])
            raise InputError(
                f"tissue: zero density with conductivity {sigma[at]} S/m at voxel [z, y, x] = {list(at)}"
                f"{self._naming(at)} ({int(bad.sum())} such voxels); SAR is undefined there: "
                "give a density, or no conductivity for background"
            )
        if not (rho > 0).any():
            raise InputError("tissue: no voxel has a density; there is no body to model")

    def _naming(self, at: tuple[int, ...]) -> str:
        if self.label is None:
            return ""
        label = int(self.label[at])
        return f", label {label} {self.names.get(label, '')!r}"

    @property
    def body(self) -> np.ndarray:
        """(nz, ny, nx) bool: voxels with a density."""
        return self.density_kg_m3 > 0


class FieldSource(ABC):
    """Fields per channel around one body, read lazily, box by box.

    Attributes
    ----------
    grid, tissue : the voxels and what fills them.
    conventions : as the export wrote them; conversion happens here, not in readers.
    channel_names : one per channel, in the order of w.
    centring : key of :data:`SAMPLES`; where E is sampled.
    frequency_hz : of the fields.
    channel_scale : (n,) complex; raw fields are divided by it (1, or the wave that drove the port).
    scattering : (n, n) complex S-matrix of the same ports at the same frequency, or None.
    scattering_accuracy : one-sided uncertainty of |S|² sums stated with it, or None.
    z0_ohm : reference impedance of the S-matrix, or None.
    files : path text to SHA-256 of what was read.
    notes : how ambiguous things were decided, in words, for the record.
    """

    grid: RectilinearGrid
    tissue: Tissue
    conventions: Conventions
    channel_names: tuple[str, ...]
    centring: str = "cell"
    frequency_hz: float
    channel_scale: np.ndarray
    scattering: np.ndarray | None = None
    scattering_accuracy: float | None = None
    z0_ohm: float | None = None
    files: Mapping[str, str] = {}
    notes: tuple[str, ...] = ()

    @property
    def n_channels(self) -> int:
        """Number of channels n."""
        return len(self.channel_names)

    @abstractmethod
    def read_raw_electric(self, channel: int, box: Box) -> np.ndarray:
        """E of one channel as the export holds it, V/m at the export's own scale and phase sense.

        Parameters
        ----------
        channel : 0-based.
        box : slices over *samples* (z, y, x), each with start and stop.

        Returns
        -------
        (3, dz, dy, dx) complex array; components x, y, z. Where a component has no sample on the
        last plane of the box (edge centring), that plane holds anything and is never used.
        """

    def read_raw_magnetic(self, channel: int, box: Box) -> np.ndarray | None:
        """H of one channel, A/m, as :meth:`read_raw_electric`; None where the export has none."""
        return None

    def electric(self, channel: int, cells: Box) -> np.ndarray:
        """E for a box of cells: (3, dz+e, dy+e, dx+e) complex64, V/m, peak, e^{+jωt}, per unit w.

        e is 0 for cell centring and 1 for node and edge centring (:data:`SAMPLES`).
        """
        return self._convert(self.read_raw_electric(channel, self._samples(cells)), channel)

    def magnetic(self, channel: int, cells: Box) -> np.ndarray | None:
        """H for a box of cells, A/m, converted as :meth:`electric`; None where there is none."""
        raw = self.read_raw_magnetic(channel, self._samples(cells))
        return None if raw is None else self._convert(raw, channel)

    def _samples(self, cells: Box) -> Box:
        extra = 0 if self.centring == "cell" else 1
        z, y, x = (slice(*s.indices(n)[:2]) for s, n in zip(cells, self.grid.shape, strict=True))
        return (
            slice(z.start, z.stop + extra),
            slice(y.start, y.stop + extra),
            slice(x.start, x.stop + extra),
        )

    def _convert(self, raw: np.ndarray, channel: int) -> np.ndarray:
        # Divide in the export's own phase sense, then conjugate: the wave that drove the port is
        # a phasor of the same export.
        scale = 1.0 / complex(self.channel_scale[channel])
        if self.conventions.phasor == "rms":
            scale *= np.sqrt(2.0)
        # What is not finite matters in tissue alone, and is refused there by whoever uses it.
        with np.errstate(invalid="ignore", over="ignore"):
            values = np.multiply(raw, np.complex64(scale), dtype=np.complex64)
        if self.conventions.time_sign == "-":
            np.conj(values, out=values)
        return values

    def describe(self) -> dict[str, Any]:
        """Plain record of what was read, for metadata and reports."""
        return {
            "centring": self.centring,
            "conventions": {
                "phasor": self.conventions.phasor,
                "time_sign": self.conventions.time_sign,
                "reference": self.conventions.reference,
                "stated_by": dict(self.conventions.stated_by),
            },
            "frequency_hz": float(self.frequency_hz),
            "grid_shape_zyx": list(self.grid.shape),
            "files": dict(self.files),
            "notes": list(self.notes),
        }
