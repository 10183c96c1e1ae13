"""The weights of a proof on disk, so that anyone can recheck it in one pass without searching.

On disk (HDF5, format "vop-certificate", version 1):

* the header of :mod:`vop.storage`; attributes ``set_digest``, ``model_digest`` (what it is about)
  and ``digest`` (SHA-256 over those two and all datasets);
* ``underestimation/…`` with, for matrix v of the model, the terms ``starts[v]`` … ``starts[v+1]`` of
  ``index`` (VOPs) and ``weight`` (int64, in units of 2⁻⁴⁸, of sum exactly 2⁴⁸);
* ``overestimation/…`` likewise for each VOP, over matrices of the model;
* ``relative_bound/…`` likewise for S, one row, without terms where S ⪯ Σ c Q is not claimed;
* ``worst_case/row`` and ``worst_case/excitation`` (n,) complex128.
"""

from __future__ import annotations

import hashlib
import os
from dataclasses import dataclass

import h5py
import numpy as np

from vop.errors import InputError
from vop.metadata import Metadata
from vop.proof.cover import Cover
from vop.proof.worst_case import Attained
from vop.storage import create_hdf5, open_hdf5, read_header, write_header

FORMAT = "vop-certificate"
FORMAT_VERSION = 1
_STATEMENTS = ("underestimation", "overestimation", "relative_bound")


@dataclass(frozen=True, eq=False)
class Certificate:
    """Weights of both statements and the witness of the worst case, bound to one set and one model."""

    set_digest: str
    model_digest: str
    underestimation: Cover
    overestimation: Cover
    relative_bound: Cover
    worst_case: Attained

    def _covers(self) -> tuple[Cover, Cover, Cover]:
        return self.underestimation, self.overestimation, self.relative_bound

    def digest(self) -> str:
        """SHA-256, hexadecimal, over everything."""
        sha = hashlib.sha256(f"{self.set_digest} {self.model_digest}".encode())
        for cover in self._covers():
            for values in (cover.starts, cover.index, cover.weight):
                sha.update(np.ascontiguousarray(values, dtype="<i8").data)
        sha.update(str(self.worst_case.row).encode())
        sha.update(np.ascontiguousarray(self.worst_case.excitation, dtype="<c16").data)
        return sha.hexdigest()

    def save(self, path: str | os.PathLike[str], metadata: Metadata, force: bool = False) -> None:
        """Write the certificate; the file is whole or absent.

        Raises
        ------
        OutputError
            If ``path`` exists and not ``force``, or cannot be written.
        """
        with create_hdf5(path, force) as handle:
            write_header(handle, FORMAT, FORMAT_VERSION, metadata)
            handle.attrs["set_digest"] = self.set_digest
            handle.attrs["model_digest"] = self.model_digest
            handle.attrs["digest"] = self.digest()
            for name, cover in zip(_STATEMENTS, self._covers(), strict=True):
                for part in ("starts", "index", "weight"):
                    handle.create_dataset(f"{name}/{part}", data=getattr(cover, part).astype("<i8"))
            handle["worst_case/row"] = np.int64(self.worst_case.row)
            handle["worst_case/excitation"] = self.worst_case.excitation.astype("<c16")

    @classmethod
    def load(cls, path: str | os.PathLike[str], n_matrices: int, n_vops: int, n: int) -> Certificate:
        """Read a certificate and check its form, not what it says.

        Raises
        ------
        InputError
            Where the file is no certificate, of an unknown version, damaged, of other sizes, or a
            row of weights is not a convex combination exactly.
        """
        with open_hdf5(path, sealed=True) as handle:
            read_header(handle, FORMAT, FORMAT_VERSION)
            covers = []
            for name, rows, columns in zip(
                _STATEMENTS, (n_matrices, n_vops, 1), (n_vops, n_matrices, n_matrices), strict=True
            ):
                cover = Cover(*(_int64(handle, f"{name}/{part}") for part in ("starts", "index", "weight")))
                if len(cover) != rows:
                    raise InputError(f"{path}: {name} has {len(cover)} rows, expected {rows}")
                fault = cover.fault(columns)
                if fault is not None:
                    raise InputError(f"{path}: {name}: {fault}; the certificate was altered or damaged")
                covers.append(cover)
            row = int(handle["worst_case/row"][()])
            excitation = handle["worst_case/excitation"][()].astype(np.complex128)
            if excitation.shape != (n,) or not 0 <= row < n_matrices:
                raise InputError(f"{path}: worst_case is not a row and an excitation of {n} channels")
            found = cls(
                str(handle.attrs["set_digest"]),
                str(handle.attrs["model_digest"]),
                covers[0],
                covers[1],
                covers[2],
                Attained(row, excitation),
            )
            if found.digest() != handle.attrs["digest"]:
                raise InputError(
                    f"{path}: the digest does not fit the contents; the file was altered or damaged"
                )
        return found


def _int64(handle: h5py.File, name: str) -> np.ndarray:
    dataset = handle[name]
    if dataset.ndim != 1 or dataset.dtype != np.dtype("<i8"):
        raise InputError(f"{handle.filename}: {name} should be int64 of one dimension")
    return dataset[()].astype(np.int64)
