"""Layout "edge-hdf5": one HDF5 file with the three components of E on their own cell edges.

* ``edges/x``, ``edges/y``, ``edges/z``: cell edges in metres, nx+1, ny+1, nz+1 of them.
* ``tissue/conductivity`` (S/m) and ``tissue/density`` (kg/m³): (nz, ny, nx); density 0 = background.
* ``channels/NAME``, one group per channel, in the order of their names with numbers read as numbers:
  ``Ex`` (nz+1, ny+1, nx), ``Ey`` (nz+1, ny, nx+1), ``Ez`` (nz, ny+1, nx+1), complex, V/m; attribute
  ``incident_wave`` (real, imaginary), √W, by which the channel's fields are divided, optional.
* attribute ``frequency`` in Hz; optional attributes ``phasor`` ("peak", "rms"), ``time_sign``
  ("+", "-"), ``reference``.
"""

from __future__ import annotations

from functools import cached_property
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from vop.errors import InputError
from vop.fields import FieldSource, Tissue
from vop.grid import Box, RectilinearGrid
from vop.metadata import Conventions
from vop.storage import file_digest, open_hdf5
from vop_readers._hdf5 import natural_order, read_number, read_text, read_wave

#: Axis (z, y, x) along which a component has one sample per cell, and not per cell edge.
_OWN_AXIS = {"Ex": 2, "Ey": 1, "Ez": 0}


class EdgeHdf5Source(FieldSource):
    """Fields of one such file, opened for each box that is read."""

    centring = "edge"

    def __init__(self, file: Path, options: dict[str, Any]) -> None:
        self._file = file
        with open_hdf5(file) as handle:
            self.grid = RectilinearGrid(*(handle[f"edges/{a}"][()] for a in "xyz"))
            self.tissue = Tissue(handle["tissue/conductivity"][()], handle["tissue/density"][()])
            if self.tissue.density_kg_m3.shape != self.grid.shape:
                raise InputError(
                    f"{file}: tissue {self.tissue.density_kg_m3.shape} does not fill the grid of "
                    f"{self.grid.shape} cells (z, y, x)"
                )
            self.frequency_hz = read_number(handle, "frequency")
            channels = handle["channels"]
            self.channel_names = tuple(sorted(channels, key=natural_order))
            if not self.channel_names:
                raise InputError(f"{file}: the group 'channels' is empty")
            waves = [read_wave(channels[name]) for name in self.channel_names]
            for name in self.channel_names:
                self._check_shapes(channels[name])
            in_file = {k: read_text(handle, k) for k in ("phasor", "time_sign", "reference")}
        if any(w is None for w in waves) and any(w is not None for w in waves):
            raise InputError(f"{file}: some channels have an incident_wave and some have none")
        if waves[0] is not None:
            in_file["reference"] = in_file["reference"] or "forward power"
        self.channel_scale = np.array([1.0 if w is None else w for w in waves])
        self.conventions = Conventions.settle(str(file), in_file, options)

    def _check_shapes(self, channel: h5py.Group) -> None:
        for name, axis in _OWN_AXIS.items():
            wanted = tuple(c + (a != axis) for a, c in enumerate(self.grid.shape))
            dataset = channel[name]
            if dataset.shape != wanted or dataset.dtype.kind != "c":
                raise InputError(
                    f"{self._file}: {dataset.name} should be complex of shape {wanted}, "
                    f"found {dataset.dtype} {dataset.shape}"
                )

    @cached_property
    def files(self) -> dict[str, str]:  # type: ignore[override]
        """File name to SHA-256; computed when first asked for."""
        return {self._file.name: file_digest(self._file)}

    def read_raw_electric(self, channel: int, box: Box) -> np.ndarray:
        """See :meth:`vop.fields.FieldSource.read_raw_electric`."""
        out = np.zeros((3, *(s.stop - s.start for s in box)), dtype=np.complex64)
        with open_hdf5(self._file) as handle:
            group = handle[f"channels/{self.channel_names[channel]}"]
            for component, (name, axis) in enumerate(_OWN_AXIS.items()):
                # One sample fewer along the component's own axis: the last plane stays zero.
                part = tuple(slice(s.start, s.stop - (a == axis)) for a, s in enumerate(box))
                values = group[name][part]
                nz, ny, nx = values.shape
                out[component, :nz, :ny, :nx] = values
        return out


class EdgeHdf5Reader:
    """All channels in one HDF5 file, E on cell edges."""

    description = "one HDF5 file with all channels, components of E on their own cell edges"

    def recognises(self, path: Path) -> bool:
        """Whether the file has cell edges, tissue and channels."""
        try:
            with h5py.File(path, "r") as handle:
                return all(name in handle for name in ("edges/x", "tissue/density", "channels"))
        except OSError:
            return False

    def open(
        self,
        path: Path,
        *,
        phasor: str | None = None,
        time_sign: str | None = None,
        reference: str | None = None,
    ) -> FieldSource:
        """Open the file.

        Parameters
        ----------
        phasor : "peak" or "rms"; needed unless the file states it.
        time_sign : "+" for e^{+jωt}, "-" for e^{−jωt}; needed unless the file states it.
        reference : excitation reference; needed unless the file states it or has incident waves.

        Raises
        ------
        InputError, ConventionError
        """
        options = {"phasor": phasor, "time_sign": time_sign, "reference": reference}
        return EdgeHdf5Source(path, options)


READER = EdgeHdf5Reader()
