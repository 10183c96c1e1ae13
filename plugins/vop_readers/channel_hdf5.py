"""Layout "channel-hdf5": a folder with one HDF5 file per channel and a tissue file.

* ``channel_*.h5`` (one per channel, in the order of their names, numbers read as numbers):
  ``E/real`` and ``E/imag``, each (3, z, y, x), V/m at the export's own scale; ``H/…`` likewise, A/m,
  optional; ``axes/x``, ``axes/y``, ``axes/z``: sample positions in metres; attribute ``frequency``
  in Hz; attribute ``incident_wave`` (real, imaginary), √W: the wave that drove the port, by which
  the fields are divided. Optional attributes that state conventions: ``phasor`` ("peak", "rms"),
  ``time_sign`` ("+", "-"), ``reference``, ``b0_direction``.
* ``tissue.h5``: ``label`` (z, y, x), 0 = background; ``names``, ``conductivity`` (S/m) and
  ``density`` (kg/m³) by label; ``axes``. Labels as many as samples mean cell-centred fields; one
  fewer along every axis means fields on the nodes of the cells.
* ``*.sNp`` (optional): Touchstone, the S-matrix of the same ports.

``incident_wave`` states the reference: |w|² is forward power in watts.
"""

from __future__ import annotations

import re
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

_TISSUE = "tissue.h5"
#: Decoded chunks kept per channel file: neighbouring boxes of a tile share them.
_CHUNK_CACHE_BYTES = 8 << 20


class ChannelHdf5Source(FieldSource):
    """Fields of one such folder; files are opened when first read and kept open."""

    def __init__(self, folder: Path, files: list[Path], tissue_file: Path, options: dict[str, Any]) -> None:
        self._files = files
        self._tissue_file = tissue_file
        self._handles: dict[int, h5py.File] = {}
        self.channel_names = tuple(_natural_name(f) for f in files)
        axes = self._read_tissue()
        stated: list[dict[str, str | None]] = []
        scales, frequencies = [], []
        for file in files:
            with open_hdf5(file) as handle:
                frequencies.append(read_number(handle, "frequency"))
                scales.append(read_wave(handle))
                stated.append(
                    {k: read_text(handle, k) for k in ("phasor", "time_sign", "reference", "b0_direction")}
                )
                self._check_grid(handle, axes)
        if len(set(frequencies)) != 1:
            raise InputError(f"{folder}: the channels differ in frequency: {sorted(set(frequencies))} Hz")
        for name in stated[0]:
            if len({s[name] for s in stated}) != 1:
                raise InputError(f"{folder}: the channel files differ in what they state for {name}")
        self.frequency_hz = frequencies[0]
        self.channel_scale = np.array([1.0 if s is None else s for s in scales])
        in_file = dict(stated[0])
        self.b0_direction = in_file.pop("b0_direction")
        if all(s is not None for s in scales):
            in_file["reference"] = in_file["reference"] or "forward power"
        elif any(s is not None for s in scales):
            raise InputError(f"{folder}: some channel files have an incident_wave and some have none")
        self.conventions = Conventions.settle(str(folder), in_file, options)
        self._read_network(folder)

    def _read_tissue(self) -> dict[str, np.ndarray]:
        with open_hdf5(self._tissue_file) as handle:
            label = handle["label"][()]
            sigma, rho = handle["conductivity"][()], handle["density"][()]
            names = [v.decode() if isinstance(v, bytes) else str(v) for v in handle["names"][()]]
            axes = {a: handle[f"axes/{a}"][()] for a in "xyz"}
        where = str(self._tissue_file)
        if label.ndim != 3 or label.dtype.kind not in "ui":
            raise InputError(
                f"{where}: label should be integers of shape (z, y, x), found {label.dtype} {label.shape}"
            )
        if not len(sigma) == len(rho) == len(names) or label.min() < 0 or label.max() >= len(names):
            raise InputError(
                f"{where}: labels run from {label.min()} to {label.max()}, with {len(names)} "
                f"names, {len(sigma)} conductivities and {len(rho)} densities"
            )
        counts = tuple(axes[a].size for a in "zyx")
        if label.shape == counts:
            self.centring = "cell"
            self.grid = RectilinearGrid.from_centres(axes["x"], axes["y"], axes["z"])
        elif label.shape == tuple(c - 1 for c in counts):
            self.centring = "node"
            self.grid = RectilinearGrid(axes["x"], axes["y"], axes["z"])
        else:
            raise InputError(
                f"{where}: label {label.shape} fits neither the cells nor the nodes of axes "
                f"with {counts} positions (z, y, x)"
            )
        self.tissue = Tissue(sigma[label], rho[label], label, dict(enumerate(names)))
        return axes

    def _check_grid(self, handle: h5py.File, axes: dict[str, np.ndarray]) -> None:
        where = handle.filename
        for a, wanted in axes.items():
            found = handle[f"axes/{a}"][()]
            step = np.diff(wanted).min()
            if found.shape != wanted.shape or not np.allclose(found, wanted, rtol=0, atol=1e-3 * step):
                raise InputError(
                    f"{where}: axis {a} ({found.size} positions) differs from the tissue's "
                    f"({wanted.size}); all files must share one grid"
                )
        shape = (3, *(axes[a].size for a in "zyx"))
        for part in ("E/real", "E/imag"):
            if handle[part].shape != shape or handle[part].dtype.kind != "f":
                raise InputError(
                    f"{where}: {part} should be real numbers of shape {shape}, found "
                    f"{handle[part].dtype} {handle[part].shape}"
                )

    def _read_network(self, folder: Path) -> None:
        found = sorted(folder.glob(f"*.s{self.n_channels}p"))
        if len(found) > 1:
            raise InputError(f"{folder}: several S-matrices: {', '.join(f.name for f in found)}; keep one")
        self._network_file = found[0] if found else None
        if self._network_file is None:
            return
        from vop.errors import PluginError
        from vop.network import read_touchstone

        try:
            network = read_touchstone(self._network_file, self.frequency_hz)
        except PluginError as missing:
            self.notes = (*self.notes, f"S-matrix {self._network_file.name} not read: {missing}")
            return
        # Touchstone is e^{+jωt} by definition, the house convention: no conjugation here.
        self.scattering, self.z0_ohm = network.matrix, network.z0_ohm

    @cached_property
    def files(self) -> dict[str, str]:  # type: ignore[override]
        """File name to SHA-256; computed when first asked for."""
        paths = [*self._files, self._tissue_file]
        paths += [self._network_file] if self._network_file is not None else []
        return {p.name: file_digest(p) for p in paths}

    def read_raw_electric(self, channel: int, box: Box) -> np.ndarray:
        """See :meth:`vop.fields.FieldSource.read_raw_electric`."""
        return self._read(channel, "E", box)

    def read_raw_magnetic(self, channel: int, box: Box) -> np.ndarray | None:
        """See :meth:`vop.fields.FieldSource.read_raw_magnetic`."""
        with_h = "H" in self._handle(channel)
        return self._read(channel, "H", box) if with_h else None

    def _handle(self, channel: int) -> h5py.File:
        if channel not in self._handles:
            file = self._files[channel]
            try:
                self._handles[channel] = h5py.File(file, "r", rdcc_nbytes=_CHUNK_CACHE_BYTES)
            except OSError as error:
                raise InputError(f"{file}: not readable any more: {str(error).splitlines()[0]}") from error
        return self._handles[channel]

    def _read(self, channel: int, field: str, box: Box) -> np.ndarray:
        handle = self._handle(channel)
        try:
            real, imag = handle[f"{field}/real"], handle[f"{field}/imag"]
            out = np.empty((3, *(s.stop - s.start for s in box)), dtype=np.complex64)
            out.real = real[(slice(None), *box)]
            out.imag = imag[(slice(None), *box)]
        except (OSError, KeyError, TypeError, ValueError) as error:
            raise InputError(
                f"{self._files[channel]}: {field} cannot be read (truncated or damaged): "
                f"{str(error).splitlines()[0]}"
            ) from error
        return out


def _natural_name(file: Path) -> str:
    numbers = re.findall(r"\d+", file.stem)
    return str(int(numbers[-1])) if numbers else file.stem


class ChannelHdf5Reader:
    """One HDF5 file per channel in a folder, with a tissue file."""

    description = "folder with one cell- or node-centred HDF5 file per channel, and tissue.h5"

    def recognises(self, path: Path) -> bool:
        """Whether the folder holds a tissue file and at least one channel file."""
        return path.is_dir() and (path / _TISSUE).is_file() and any(path.glob("channel_*.h5"))

    def open(
        self,
        path: Path,
        *,
        phasor: str | None = None,
        time_sign: str | None = None,
        reference: str | None = None,
        pattern: str = "channel_*.h5",
    ) -> FieldSource:
        """Open the folder.

        Parameters
        ----------
        phasor : "peak" or "rms"; needed unless the files state it.
        time_sign : "+" for e^{+jωt}, "-" for e^{−jωt}; needed unless the files state it.
        reference : excitation reference; needed unless the files state it or have incident_wave.
        pattern : of the names of the channel files.

        Raises
        ------
        InputError, ConventionError
        """
        if not path.is_dir():
            raise InputError(f"{path}: this layout is a folder with {pattern} and {_TISSUE}")
        if "/" in pattern or ".." in pattern:
            raise InputError(f"pattern {pattern!r} should name files inside the folder")
        files = sorted(path.glob(pattern), key=lambda file: natural_order(file.name))
        if not files:
            raise InputError(f"{path}: no file matches {pattern!r}")
        options = {"phasor": phasor, "time_sign": time_sign, "reference": reference}
        return ChannelHdf5Source(path, files, path / _TISSUE, options)


READER = ChannelHdf5Reader()
