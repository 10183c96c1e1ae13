"""Local SAR matrices of one body and one array: in memory, and on disk.

On disk (HDF5, format "vop-sar-model", version 1):

* attributes ``format``, ``format_version``, ``written_by``, ``metadata`` (JSON, :mod:`vop.metadata`),
  ``digest`` (SHA-256 over the metadata and all datasets);
* ``local/packed`` (N, n²) float32, contiguous, order of :mod:`vop.hermitian`, W/kg per |w|²,
  rounded outward (never below the float64 value in the semidefinite order);
* ``cubes/…`` the fields of :class:`vop.cubes.CubeGeometry` (absent for bare matrices);
* ``global/NAME`` (n, n) complex128, each with attribute ``unit``.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from vop.cubes import CubeGeometry
from vop.errors import InputError
from vop.grid import RectilinearGrid
from vop.metadata import Metadata, Reference
from vop.storage import create_hdf5, open_hdf5, read_header, write_header

FORMAT = "vop-sar-model"
FORMAT_VERSION = 1

#: Rows per step of anything that walks over all matrices; fixed, so that results do not depend on it.
CHUNK_ROWS = 1 << 15

_CUBE_ARRAYS = ("status", "voxel", "kind", "box_m", "mass_kg")


@dataclass(frozen=True, eq=False)
class SarModel:
    """N local SAR matrices with what they mean.

    packed : (N, n²) float32, C-contiguous array or read-only memory map (:mod:`vop.hermitian`).
    metadata : reference, channels, domain, record of how the model was made.
    cubes : where each matrix lives, or None for bare matrices.
    global_matrices : name to (n, n) complex128, e.g. "absorbed power" (W per |w|²).
    """

    packed: np.ndarray
    metadata: Metadata
    cubes: CubeGeometry | None = None
    global_matrices: Mapping[str, np.ndarray] = field(default_factory=dict)
    global_units: Mapping[str, str] = field(default_factory=dict)

    @property
    def n_channels(self) -> int:
        """Number of channels n."""
        return len(self.metadata.channel_names)

    def __len__(self) -> int:
        return int(self.packed.shape[0])

    @classmethod
    def from_matrices(
        cls,
        matrices: np.ndarray,
        *,
        reference: str = "forward power",
        channel_names: tuple[str, ...] | None = None,
        metadata: Metadata | None = None,
    ) -> SarModel:
        """Model of bare matrices.

        Parameters
        ----------
        matrices : (N, n, n) complex or real, Hermitian positive semidefinite, W/kg per |w|².
        reference : what |w|² is; carried, never scaled.
        channel_names : n names, default "1" … "n".
        metadata : replaces ``reference`` and ``channel_names`` where given.

        Raises
        ------
        InputError
            Where the shape is wrong, or a matrix holds NaN, is not Hermitian beyond rounding of
            its own dtype, or is indefinite beyond rounding of float32.
        """
        from vop.matrices import validated_packed

        packed = validated_packed(matrices)
        n = int(np.asarray(matrices).shape[-1])
        if metadata is None:
            names = channel_names or tuple(str(c + 1) for c in range(n))
            metadata = Metadata(reference=Reference(reference), channel_names=tuple(names))
        if len(metadata.channel_names) != n:
            raise InputError(f"{len(metadata.channel_names)} channel names for matrices of {n} channels")
        return cls(packed=packed, metadata=metadata)

    def matrices(self, index: Any = slice(None)) -> np.ndarray:
        """Dense (…, n, n) complex128 of the rows at ``index``."""
        from vop.hermitian import unpack

        return unpack(np.asarray(self.packed[index]))

    def sar_map(self, w: np.ndarray) -> np.ndarray:
        """Averaged SAR of every voxel for one excitation, W/kg: :func:`vop.exposure.sar_map`."""
        from vop.exposure import sar_map

        return sar_map(self, w)

    def with_metadata(self, metadata: Metadata) -> SarModel:
        """The same matrices under other metadata."""
        return replace(self, metadata=metadata)

    def digest(self) -> str:
        """SHA-256, hexadecimal, over metadata and all numbers; equal data digest equally."""
        sha = hashlib.sha256(self.metadata.to_json().encode())
        if self.cubes is not None:
            c = self.cubes
            sha.update(repr((c.rule, c.notes, c.average_mass_kg)).encode())
        sha.update(repr(sorted(self.global_units.items())).encode())
        for rows in self.chunks():
            sha.update(np.ascontiguousarray(rows).data)
        for name, values in self._extra_datasets():
            sha.update(name.encode())
            sha.update(np.ascontiguousarray(values).data)
        return sha.hexdigest()

    def chunks(self) -> Iterator[np.ndarray]:
        """Views of ``packed``, CHUNK_ROWS rows each."""
        for start in range(0, len(self), CHUNK_ROWS):
            yield self.packed[start : start + CHUNK_ROWS]

    def _extra_datasets(self) -> Iterator[tuple[str, np.ndarray]]:
        if self.cubes is not None:
            for name in _CUBE_ARRAYS:
                yield f"cubes/{name}", getattr(self.cubes, name)
            for axis, edges in zip("zyx", self.cubes.grid.edges_m, strict=True):
                yield f"cubes/{axis}_edges_m", edges
        for name in sorted(self.global_matrices):
            yield f"global/{name}", np.asarray(self.global_matrices[name], dtype=np.complex128)

    def save(self, path: str | os.PathLike[str], force: bool = False) -> None:
        """Write the model; the file is whole or absent.

        Raises
        ------
        OutputError
            If ``path`` exists and not ``force``, or cannot be written.
        """
        with create_hdf5(path, force) as handle:
            rows = create_rows(handle, self.packed.shape)
            at = 0
            for chunk in self.chunks():
                rows[at : at + len(chunk)] = chunk
                at += len(chunk)
            write_model(handle, self)

    @classmethod
    def load(cls, path: str | os.PathLike[str], verify: bool = True) -> SarModel:
        """Open a model; the matrices stay on disk and are mapped into memory.

        Parameters
        ----------
        verify : check the seal over the whole file (one pass).

        Raises
        ------
        InputError
            Where the file is no model, of an unknown version, damaged or altered.
        """
        with open_hdf5(path, sealed=verify) as handle:
            metadata = read_header(handle, FORMAT, FORMAT_VERSION)
            packed = _map_rows(handle, "local/packed", len(metadata.channel_names) ** 2)
            cubes = _read_cubes(handle, packed.shape[0]) if "cubes" in handle else None
            matrices, units = {}, {}
            for name, dataset in handle.get("global", {}).items():
                if dataset.shape != (len(metadata.channel_names),) * 2:
                    raise InputError(f"{path}: global/{name} has shape {dataset.shape}")
                matrices[name] = dataset[()].astype(np.complex128)
                units[name] = str(dataset.attrs.get("unit", "not stated"))
        return cls(packed, metadata, cubes, matrices, units)


def create_rows(handle: h5py.File, shape: tuple[int, ...]) -> h5py.Dataset:
    """The dataset of packed matrices in a new file, to be filled by slices."""
    return handle.create_dataset("local/packed", shape, np.float32)


def write_model(handle: h5py.File, model: SarModel) -> None:
    """Write all of a model but its rows, which :func:`create_rows` made and somebody filled."""
    write_header(handle, FORMAT, FORMAT_VERSION, model.metadata)
    handle.attrs["digest"] = model.digest()
    for name, values in model._extra_datasets():
        handle.create_dataset(name, data=values)
    if model.cubes is not None:
        group = handle["cubes"]
        group.attrs["rule"] = model.cubes.rule
        group.attrs["notes"] = "\n".join(model.cubes.notes)
        group.attrs["average_mass_kg"] = model.cubes.average_mass_kg or 0.0
    for name in model.global_matrices:
        handle[f"global/{name}"].attrs["unit"] = model.global_units.get(name, "not stated")


def _map_rows(handle: h5py.File, name: str, width: int) -> np.ndarray:
    dataset = handle[name]
    if (
        not isinstance(dataset, h5py.Dataset)
        or dataset.ndim != 2
        or dataset.shape[1] != width
        or dataset.shape[0] < 1
        or dataset.dtype != np.dtype("<f4")
    ):
        raise InputError(
            f"{handle.filename}: {name} should be float32 of shape (N, {width}), N ≥ 1, "
            f"found {getattr(dataset, 'dtype', '?')} {getattr(dataset, 'shape', '?')}"
        )
    offset = dataset.id.get_offset()
    if offset is None or Path(handle.filename).stat().st_size < offset + 4 * dataset.size:
        raise InputError(f"{handle.filename}: {name} is not stored whole and contiguous; the file is damaged")
    return np.memmap(handle.filename, np.dtype("<f4"), "r", offset, dataset.shape)


def _read_cubes(handle: h5py.File, n_matrices: int) -> CubeGeometry:
    group = handle["cubes"]
    grid = RectilinearGrid(*(group[f"{axis}_edges_m"][()] for axis in "xyz"))
    arrays = {name: group[name][()] for name in _CUBE_ARRAYS}
    if arrays["status"].shape != grid.shape or any(
        arrays[name].shape[0] != n_matrices for name in _CUBE_ARRAYS[1:]
    ):
        raise InputError(f"{handle.filename}: the cube tables do not fit the grid or the matrices")
    notes = str(group.attrs["notes"])
    return CubeGeometry(
        grid=grid,
        **arrays,
        average_mass_kg=float(group.attrs["average_mass_kg"]) or None,
        rule=str(group.attrs["rule"]),
        notes=tuple(notes.split("\n")) if notes else (),
    )
