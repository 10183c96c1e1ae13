"""The compressed set: delivered VOPs, the bound they hold, and where they came from.

On disk (HDF5, format "vop-set", version 1):

* the header of :mod:`vop.storage` and ``digest``;
* ``vops/packed`` (K, n²) float32: the *delivered* VOPs A_k (core plus its share of εS), W/kg per
  |w|², order of :mod:`vop.hermitian`; SAR(w) ≤ max_k wᴴA_kw;
* ``vops/core_index`` (K,) int64: row of the model that each core came from, −1 for a core that is
  no member (a hint for maps and proofs, never evidence);
* ``overestimation_matrix`` (n², ) float64 packed: S; attribute ``overestimation``: ε;
* attribute ``worst_case``: a proved lower bound, tight to rounding, of max over matrices of λmax;
* ``global/NAME`` as in the model.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any

import h5py
import numpy as np

from vop.errors import InputError
from vop.metadata import Metadata
from vop.storage import create_hdf5, open_hdf5, read_header, require_finite, write_header

FORMAT = "vop-set"
FORMAT_VERSION = 1


@dataclass(frozen=True, eq=False)
class VopSet:
    """K delivered VOPs A_k with Q_v ⪯ conv(A) for every matrix, A_k ⪯ conv(Q) + εS for every VOP.

    packed : (K, n²) float32; what is stored, exported and proved, to the bit.
    overestimation : ε, as a fraction; the bound in W/kg is ε·S.
    worst_case : W/kg per |w|²; max over matrices of λmax, from below to rounding.
    overestimation_matrix : (n, n) complex128, S in W/kg per |w|² (worst_case · 1 by default).
    core_index : (K,) int64, row of the model each core came from, −1 if none.
    method : name of the compression method.
    """

    packed: np.ndarray
    overestimation: float
    worst_case: float
    overestimation_matrix: np.ndarray
    core_index: np.ndarray
    method: str
    metadata: Metadata
    global_matrices: Mapping[str, np.ndarray] = field(default_factory=dict)
    global_units: Mapping[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        from vop.hermitian import pack, unpack

        # Through the packed form, as after reading a file: equal sets export to equal bytes.
        object.__setattr__(self, "overestimation_matrix", unpack(pack(self.overestimation_matrix)))

    def __len__(self) -> int:
        return int(self.packed.shape[0])

    @property
    def n_channels(self) -> int:
        """Number of channels n."""
        return len(self.metadata.channel_names)

    @property
    def matrices(self) -> np.ndarray:
        """(K, n, n) complex128: the delivered VOPs, exactly as stored."""
        from vop.hermitian import unpack

        return unpack(self.packed)

    def _datasets(self) -> Iterator[tuple[str, np.ndarray]]:
        from vop.hermitian import pack

        yield "vops/packed", self.packed
        yield "vops/core_index", self.core_index
        yield "overestimation_matrix", pack(self.overestimation_matrix)
        for name in sorted(self.global_matrices):
            yield f"global/{name}", np.asarray(self.global_matrices[name], dtype=np.complex128)

    def _scalars(self) -> dict[str, Any]:
        return {
            "method": self.method,
            "overestimation": float(self.overestimation),
            "worst_case": float(self.worst_case),
        }

    def digest(self) -> str:
        """SHA-256, hexadecimal, over metadata, bound and all numbers."""
        sha = hashlib.sha256(self.metadata.to_json().encode())
        sha.update(repr(sorted(self._scalars().items())).encode())
        sha.update(repr(sorted(self.global_units.items())).encode())
        for name, values in self._datasets():
            sha.update(name.encode())
            sha.update(np.ascontiguousarray(values).data)
        return sha.hexdigest()

    def save(self, path: str | os.PathLike[str], force: bool = False) -> None:
        """Write the set; the file is whole or absent.

        Raises
        ------
        OutputError
            If ``path`` exists and not ``force``, or cannot be written.
        """
        with create_hdf5(path, force) as handle:
            write_set(handle, self)

    @classmethod
    def load(cls, path: str | os.PathLike[str]) -> VopSet:
        """Read a set and check its digest.

        Raises
        ------
        InputError
            Where the file is no set, of an unknown version, damaged, or its digest is wrong.
        """
        with open_hdf5(path, sealed=True) as handle:
            found = read_set(handle)
            wanted = handle.attrs.get("digest")
        if found.digest() != wanted:
            raise InputError(f"{path}: the digest does not fit the contents; the file was altered or damaged")
        return found


def write_set(handle: h5py.File, vop_set: VopSet) -> None:
    """Write ``vop_set`` into an open, empty HDF5 file (schema in this module's docstring)."""
    write_header(handle, FORMAT, FORMAT_VERSION, vop_set.metadata)
    for name, value in vop_set._scalars().items():
        handle.attrs[name] = value
    for name, values in vop_set._datasets():
        handle.create_dataset(name, data=values)
    for name in vop_set.global_matrices:
        handle[f"global/{name}"].attrs["unit"] = vop_set.global_units.get(name, "not stated")
    handle.attrs["digest"] = vop_set.digest()


def read_set(handle: h5py.File) -> VopSet:
    """Read what :func:`write_set` wrote, checking shapes and values but not the digest."""
    from vop.hermitian import unpack

    where = handle.filename
    metadata = read_header(handle, FORMAT, FORMAT_VERSION)
    n = len(metadata.channel_names)
    packed, core, s = handle["vops/packed"], handle["vops/core_index"], handle["overestimation_matrix"]
    for dataset, dtype, shape in (
        (packed, "<f4", (packed.shape[0], n * n)),
        (core, "<i8", packed.shape[:1]),
        (s, "<f8", (n * n,)),
    ):
        if dataset.dtype != np.dtype(dtype) or dataset.shape != shape or 0 in shape:
            raise InputError(
                f"{where}: {dataset.name} should be {dtype} of shape {shape}, "
                f"found {dataset.dtype} {dataset.shape}"
            )
    rows, s_row = packed[()], s[()]
    require_finite(rows, f"{where}: vops/packed")
    require_finite(s_row, f"{where}: overestimation_matrix")
    overestimation, worst = float(handle.attrs["overestimation"]), float(handle.attrs["worst_case"])
    if not (0 < overestimation < np.inf and 0 < worst < np.inf):
        raise InputError(f"{where}: overestimation {overestimation} and worst_case {worst} must be positive")
    matrices = {k: v[()].astype(np.complex128) for k, v in handle.get("global", {}).items()}
    units = {k: str(handle[f"global/{k}"].attrs.get("unit", "not stated")) for k in matrices}
    return VopSet(
        packed=rows,
        overestimation=overestimation,
        worst_case=worst,
        overestimation_matrix=unpack(s_row),
        core_index=core[()],
        method=str(handle.attrs["method"]),
        metadata=metadata,
        global_matrices=matrices,
        global_units=units,
    )
