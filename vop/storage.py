"""Files that are whole or absent: atomic writing, and the header that every file of ours carries."""

from __future__ import annotations

import errno
import hashlib
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import h5py
import numpy as np

from vop.errors import InputError, OutputError
from vop.metadata import Metadata

#: Suffix of files that are being written; what a killed process leaves behind bears it.
PARTIAL = ".partial"

_REASONS = {
    errno.ENOSPC: "the disk is full",
    errno.EDQUOT: "the disk quota is used up",
    errno.EROFS: "the file system is read-only",
    errno.EACCES: "permission denied",
    errno.EPERM: "permission denied",
    errno.ENOENT: "the folder does not exist",
    errno.ENOTDIR: "part of the path is not a folder",
    errno.EFBIG: "the file would be larger than allowed",
}


def refuse_existing(final: str | os.PathLike[str], force: bool) -> None:
    """Raise OutputError where ``final`` could not be written; called before hours of work, too."""
    final = Path(final)
    if final.is_dir():
        raise OutputError(f"{final} is a folder; give the name of a file")
    if final.exists() and not force:
        raise OutputError(f"{final} exists already; remove it, choose another name, or use --force")
    if not final.parent.is_dir():
        raise OutputError(f"{final}: the folder {final.parent} does not exist")


@contextmanager
def atomic_path(final: str | os.PathLike[str], force: bool = False) -> Iterator[Path]:
    """Yield a temporary path beside ``final``; rename it there once the body has succeeded.

    The bytes are flushed to the disk before the rename. On any exception, Ctrl-C included, the
    temporary file is removed and ``final`` is as it was.

    Raises
    ------
    OutputError
        If ``final`` exists and not ``force``, or the operating system refuses to write.
    """
    final = Path(final)
    refuse_existing(final, force)
    temporary = final.with_name(f".{final.name}.{os.getpid()}{PARTIAL}")
    try:
        yield temporary
        _flush(temporary)
        if force:
            os.replace(temporary, final)
        else:
            _rename_unless_exists(temporary, final)
        _flush(final.parent)
    except OSError as error:
        raise OutputError(f"cannot write {final}: {_reason(error)}; nothing was left behind") from error
    finally:
        temporary.unlink(missing_ok=True)


def _rename_unless_exists(temporary: Path, final: Path) -> None:
    try:
        os.link(temporary, final)
    except FileExistsError:
        raise OutputError(f"{final} was written by another process meanwhile; left alone") from None
    except OSError:  # a file system without hard links
        os.replace(temporary, final)


def _flush(path: Path) -> None:
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def _reason(error: OSError) -> str:
    # HDF5 hides the cause in its text: "... errno = 28, error message = 'No space left ...'".
    number = error.errno
    if number is None:
        text = str(error)
        for candidate in _REASONS:
            if f"errno = {candidate}," in text:
                number = candidate
    if number in _REASONS:
        return _REASONS[number]
    return (str(error) or type(error).__name__).splitlines()[0]


def write_text(final: str | os.PathLike[str], text: str, force: bool = False) -> None:
    """Write UTF-8 text atomically (see :func:`atomic_path`)."""
    with atomic_path(final, force) as temporary:
        temporary.write_text(text, encoding="utf-8")


def file_digest(path: str | os.PathLike[str]) -> str:
    """SHA-256, hexadecimal, of a file's bytes.

    Raises
    ------
    InputError
        Where the file cannot be read.
    """
    try:
        with open(path, "rb") as handle:
            return hashlib.file_digest(handle, "sha256").hexdigest()
    except OSError as error:
        raise InputError(f"cannot read {path}: {error.strerror or error}") from error


#: Trailer of our own HDF5 files: a SHA-256 over every byte before it. HDF5 ignores what follows its own
#: end; we check it before the HDF5 library, which damaged files can crash, sees a byte.
_SEAL = b"\nsealed, SHA-256 "
_SEAL_BYTES = len(_SEAL) + 64


def seal(path: Path) -> None:
    """Append the seal to a finished file."""
    with open(path, "r+b") as handle:
        found = hashlib.file_digest(handle, "sha256").hexdigest()
        handle.seek(0, os.SEEK_END)
        handle.write(_SEAL + found.encode("ascii"))


def check_seal(path: str | os.PathLike[str]) -> None:
    """Raise InputError unless the file ends with a seal that fits its bytes."""
    try:
        with open(path, "rb") as handle:
            left = os.fstat(handle.fileno()).st_size - _SEAL_BYTES
            sha = hashlib.sha256()
            while left > 0 and (block := handle.read(min(left, 1 << 20))):
                sha.update(block)
                left -= len(block)
            trailer = handle.read()
    except FileNotFoundError as error:
        raise InputError(f"{path}: no such file") from error
    except OSError as error:
        raise InputError(f"cannot read {path}: {error.strerror or error}") from error
    if not trailer.startswith(_SEAL):
        raise InputError(f"{path}: no file of this tool, or truncated: it does not end with its seal")
    if trailer != _SEAL + sha.hexdigest().encode("ascii"):
        raise InputError(f"{path}: the seal does not fit the contents; the file was altered or damaged")


@contextmanager
def create_hdf5(final: str | os.PathLike[str], force: bool = False) -> Iterator[h5py.File]:
    """A new HDF5 file of ours: atomic (:func:`atomic_path`) and sealed (:func:`check_seal`)."""
    with atomic_path(final, force) as temporary:
        with h5py.File(temporary, "w") as handle:
            yield handle
        seal(temporary)


#: What the HDF5 library and h5py raise, by experiment with mutated files, when a file is damaged.
_DAMAGE = (
    OSError,
    RuntimeError,
    ValueError,
    TypeError,
    AttributeError,
    IndexError,
    OverflowError,
    NotImplementedError,
)


@contextmanager
def open_hdf5(path: str | os.PathLike[str], *, sealed: bool = False) -> Iterator[h5py.File]:
    """Open an HDF5 file for reading; every fault inside becomes an InputError that names it.

    Parameters
    ----------
    sealed : the file is one of ours; check its seal first (one pass over its bytes).

    Raises
    ------
    InputError
        Where the file is missing, truncated, no HDF5, lacks a dataset, or vanishes in mid-read.
    """
    if not Path(path).is_file():
        raise InputError(f"{path}: no such file")
    if sealed:
        check_seal(path)
    try:
        with h5py.File(path, "r") as handle:
            yield handle
    except KeyError as error:
        why = str(error.args[0]) if error.args else "unknown"
        raise InputError(f"{path}: lacks an expected item: {why}") from error
    except _DAMAGE as error:
        why = (str(error) or type(error).__name__).splitlines()[0]
        raise InputError(f"{path}: not readable as HDF5 (missing, truncated or damaged): {why}") from error


def write_header(handle: h5py.File, kind: str, version: int, metadata: Metadata) -> None:
    """Write the root attributes that every file of ours carries."""
    from vop import __version__

    handle.attrs["format"] = kind
    handle.attrs["format_version"] = version
    handle.attrs["written_by"] = f"vop {__version__}"
    handle.attrs["metadata"] = metadata.to_json()


def read_header(handle: h5py.File, kind: str, version: int) -> Metadata:
    """Check format and version, and return the metadata.

    Raises
    ------
    InputError
        Where the file is of another kind, or of a version that this code does not know.
    """
    found = handle.attrs.get("format")
    if not isinstance(found, str) or found != kind:
        raise InputError(f"{handle.filename}: expected a file of format {kind!r}, found {found!r}")
    found_version = handle.attrs.get("format_version")
    if found_version != version:
        raise InputError(
            f"{handle.filename}: {kind} version {found_version!r} is not known here; "
            f"this tool reads version {version}"
        )
    return Metadata.from_json(str(handle.attrs.get("metadata", "")))


def require_finite(values: np.ndarray, what: str) -> None:
    """Raise InputError, naming ``what`` and the first index, where ``values`` holds NaN or infinity."""
    bad = ~np.isfinite(values)
    if bad.any():
        at = [int(i) for i in np.argwhere(bad)[0]]
        raise InputError(f"{what} holds {int(bad.sum())} NaN or infinite values, the first at index {at}")
