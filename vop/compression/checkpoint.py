"""The state of a long compression on disk, so that a killed run goes on where it was."""

from __future__ import annotations

import os
import time
from collections.abc import Mapping
from pathlib import Path

import numpy as np

from vop.errors import InputError
from vop.metadata import digest
from vop.storage import create_hdf5, open_hdf5

FORMAT = "vop-compression-checkpoint"
FORMAT_VERSION = 1

#: Seconds of work that a killed run may lose.
SECONDS = 60.0


class Checkpoint:
    """Where a method leaves its state; without a path, one that never saves and never finds anything.

    The time of saving depends on the clock, the result of the run must not.
    """

    def __init__(self, path: str | os.PathLike[str] | None = None, key: str = "") -> None:
        """``key`` tells apart runs that must not be mixed."""
        self._path = None if path is None else Path(path)
        self._key = key
        self._last = time.monotonic()

    def for_bound(self, bound: float) -> Checkpoint:
        """The same place for a run at another bound."""
        return Checkpoint(self._path, digest(self._key, repr(bound)))

    def due(self) -> bool:
        """Whether it is time to save."""
        return self._path is not None and time.monotonic() - self._last >= SECONDS

    def save(self, state: Mapping[str, np.ndarray]) -> None:
        """Replace the state on disk, whole or not at all.

        Raises
        ------
        OutputError
            Where the file cannot be written.
        """
        if self._path is None:
            return
        with create_hdf5(self._path, force=True) as handle:
            handle.attrs["format"] = FORMAT
            handle.attrs["format_version"] = FORMAT_VERSION
            handle.attrs["key"] = self._key
            for name, values in state.items():
                handle.create_dataset(name, data=values)
        self._last = time.monotonic()

    def load(self) -> dict[str, np.ndarray] | None:
        """The state of an earlier run of the same key; None if there is none, or one of another key.

        Raises
        ------
        InputError
            Where the file is damaged, or is no checkpoint: it would be overwritten.
        """
        if self._path is None or not self._path.exists():
            return None
        with open_hdf5(self._path, sealed=True) as handle:
            attributes = handle.attrs
            if (attributes.get("format"), attributes.get("format_version")) != (FORMAT, FORMAT_VERSION):
                raise InputError(
                    f"{self._path} is no compression checkpoint of version {FORMAT_VERSION}; "
                    "remove it or name another file"
                )
            if attributes.get("key") != self._key:
                return None
            return {name: handle[name][()] for name in handle}

    def remove(self) -> None:
        """Delete the file once the run it belongs to has succeeded."""
        if self._path is not None:
            self._path.unlink(missing_ok=True)
