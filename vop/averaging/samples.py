"""Samples of E around a box of cells, ready for outer products."""

from __future__ import annotations

import numpy as np

from vop.errors import InputError
from vop.fields import SAMPLES, FieldSource
from vop.grid import Box

#: How several samples of a component combine in a cell: mean of their outer products, or of themselves.
COMBINATIONS = ("outer", "field")


def read_samples(
    source: FieldSource, around: Box, combine: str = "outer"
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """E of all channels for a box of cells, zero where no tissue touches it.

    Parameters
    ----------
    combine : "field" averages the samples of each cell here, "outer" leaves that to outer products.

    Returns
    -------
    e : (n, 3, samples z, y, x) complex64, V/m per unit excitation.
    offsets : (S, 3) int64 and starts : (4,) int64; component c of a cell has the samples
        offsets[starts[c] : starts[c+1]] relative to the cell's index.

    Raises
    ------
    InputError
        Where the field is not finite in tissue.
    """
    e, samples = _read(source, around), SAMPLES[source.centring]
    if combine == "field" and source.centring != "cell":
        e, samples = _mean_samples(e, samples), SAMPLES["cell"]
    offsets = np.array([o for component in samples for o in component], dtype=np.int64)
    return e, offsets, np.cumsum([0, *(len(component) for component in samples)])


def _read(source: FieldSource, around: Box) -> np.ndarray:
    body = source.tissue.body[around]
    touched = body
    if source.centring != "cell":
        # A sample matters if any cell that uses it is tissue.
        padded = np.pad(body, ((0, 1),) * 3)
        touched = np.zeros_like(padded)
        for k in (0, 1):
            for j in (0, 1):
                for i in (0, 1):
                    touched |= np.roll(padded, (k, j, i), (0, 1, 2))
    out = np.empty((source.n_channels, 3, *touched.shape), np.complex64)
    untouched = ~touched
    for channel in range(source.n_channels):
        e = source.electric(channel, around)
        e[:, untouched] = 0
        out[channel] = e
        if np.isfinite(e.sum()):  # quick; a sum that overflows is looked at below
            continue
        bad = ~np.isfinite(e).all(axis=0) & touched
        if bad.any():
            at = [int(v) + s.start for v, s in zip(np.argwhere(bad)[0], around, strict=True)]
            raise InputError(
                f"field of channel {source.channel_names[channel]} is NaN or infinite at {int(bad.sum())} "
                f"samples in tissue, the first at [z, y, x] = {at}; repair the export, or crop it away"
            )
    return out


def _mean_samples(e: np.ndarray, samples: tuple[tuple[tuple[int, int, int], ...], ...]) -> np.ndarray:
    nz, ny, nx = (s - 1 for s in e.shape[2:])
    out = np.zeros((e.shape[0], 3, nz, ny, nx), np.complex128)
    for component, offsets in enumerate(samples):
        for k, j, i in offsets:
            out[:, component] += e[:, component, k : k + nz, j : j + ny, i : i + nx]
        out[:, component] /= len(offsets)
    return out.astype(np.complex64)
