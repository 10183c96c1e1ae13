"""Hand-off: from a set to a file of some format, written atomically and read back to the bit."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np

from vop.errors import OutputError, VopError
from vop.plugins import EXPORTERS, find
from vop.storage import atomic_path
from vop.vopset import VopSet


def export(
    vop_set: VopSet, path: str | os.PathLike[str], format: str = "hdf5", *, force: bool = False
) -> None:
    """Write the delivered VOPs with an exporter plugin, and check what was written.

    The file is read back before it gets its name; it is kept only where every matrix is equal to
    the set's to the last bit, so that a proof of the set is a proof of the file.

    Parameters
    ----------
    format : name of an exporter (``vop plugins`` lists them).

    Raises
    ------
    PluginError
        Where there is no such exporter.
    OutputError
        Where the file exists and not ``force``, cannot be written, or does not read back.
    """
    exporter = find(EXPORTERS, format)
    with atomic_path(Path(path), force) as temporary:
        try:
            exporter.write(vop_set, temporary)
            found = np.asarray(exporter.read_matrices(temporary))
        except (VopError, OSError):
            raise
        except Exception as error:  # a third party's code may fail in any way
            raise OutputError(f"exporter {format!r} failed: {type(error).__name__}: {error}") from error
        if not np.array_equal(found, vop_set.matrices):
            raise OutputError(
                f"exporter {format!r}: what was written does not read back to the set "
                "that was proved; nothing was left behind"
            )
