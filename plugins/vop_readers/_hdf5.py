"""What the HDF5 layouts have in common: attributes, checked as they are read."""

from __future__ import annotations

import re

import h5py
import numpy as np

from vop.errors import InputError
from vop.storage import require_finite


def read_number(handle: h5py.File, name: str) -> float:
    """A positive finite number from attribute ``name`` of the file."""
    value = np.asarray(handle.attrs.get(name, np.nan), dtype=np.float64)
    if value.size != 1 or not np.isfinite(value).all() or not (value > 0).all():
        raise InputError(
            f"{handle.filename}: attribute {name!r} should be one positive number, found {value}"
        )
    return float(value.reshape(()))


def read_text(handle: h5py.File, name: str) -> str | None:
    """The text of attribute ``name`` of the file, or None."""
    value = handle.attrs.get(name)
    if value is None:
        return None
    return value.decode() if isinstance(value, bytes) else str(value)


def read_wave(handle: h5py.File | h5py.Group) -> complex | None:
    """Attribute ``incident_wave`` (real, imaginary), √W, or None."""
    where = f"{handle.file.filename}: {handle.name}" if handle.name != "/" else handle.file.filename
    if "incident_wave" not in handle.attrs:
        return None
    parts = np.asarray(handle.attrs["incident_wave"], dtype=np.float64)
    require_finite(parts, f"{where}: attribute 'incident_wave'")
    if parts.shape != (2,) or not parts.any():
        raise InputError(
            f"{where}: attribute 'incident_wave' should be (real, imaginary), not both zero, found {parts}"
        )
    return complex(parts[0], parts[1])


def natural_order(name: str) -> tuple[tuple[int, str], ...]:
    """Sort key that reads the numbers in a name as numbers: 2 before 10."""
    return tuple((int(p) if p.isdigit() else 0, p) for p in re.split(r"(\d+)", name))
