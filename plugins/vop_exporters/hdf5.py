"""Hand-off format "hdf5": our own set file; its schema is the docstring of :mod:`vop.vopset`."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np

from vop.storage import open_hdf5, seal
from vop.vopset import VopSet, read_set, write_set

SCHEMA = """\
vops/packed (K, n*n) float32: delivered VOPs A_k, W/kg per |w|^2, or fractions of limits
(1 is the limit) where metadata.measure says so, Hermitian, packed as: n diagonal
entries; real parts of the strict upper triangle, row by row; imaginary parts, same order.
SAR(w) = w^H Q w <= max_k w^H A_k w, w complex, peak phasors, exp(+j omega t), unit in metadata.
A_k <= conv(Q) + overestimation * S in the semidefinite order; S = overestimation_matrix, packed.
vops/core_index (K,) int64: row of the model each core came from, -1 if none.
metadata: JSON text with reference, channels, domain of use, warnings and record.
Results need review by qualified people; local rules and licensed practice decide."""


class Hdf5Exporter:
    """The set itself, with its schema inside."""

    description = "HDF5 set: packed float32 VOPs with bound, reference, domain of use and digest"
    suffix = ".h5"

    def write(self, vop_set: VopSet, path: Path) -> None:
        """See :class:`vop.plugins.Exporter`."""
        with h5py.File(path, "w") as handle:
            write_set(handle, vop_set)
            handle.attrs["schema"] = SCHEMA
        seal(path)

    def read_matrices(self, path: Path) -> np.ndarray:
        """See :class:`vop.plugins.Exporter`."""
        with open_hdf5(path, sealed=True) as handle:
            return read_set(handle).matrices


EXPORTER = Hdf5Exporter()
