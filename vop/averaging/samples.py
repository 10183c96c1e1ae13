"""Samples of E around a box of cells, ready for outer products."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from vop.averaging.scratch import Scratch
from vop.errors import InputError
from vop.fields import SAMPLES, FieldSource
from vop.grid import Box
from vop.kernels.averaging_blocks import PAIR, pack_channel
from vop.kernels.averaging_vectors import STRETCH

#: How several samples of a component combine in a cell: mean of their outer products, or of themselves.
COMBINATIONS = ("outer", "field")

_Samples = tuple[tuple[tuple[int, int, int], ...], ...]


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
    samples, touched = _samples(source, combine), _touched(source, around)
    out = []
    for channel in range(source.n_channels):
        e = source.electric(channel, around)
        _require_finite(e, touched, source.channel_names[channel], around)
        e[:, ~touched] = 0
        averaged = combine == "field" and source.centring != "cell"
        out.append(_mean(e, SAMPLES[source.centring]) if averaged else e)
    offsets = np.array([o for component in samples for o in component], dtype=np.int64)
    return np.array(out), offsets, np.cumsum([0, *(len(component) for component in samples)])


@dataclass(frozen=True, eq=False)
class PackedSamples:
    """Samples of all channels where :func:`vop.kernels.averaging_blocks.average_blocks` wants them.

    e : (pairs, samples z, y, stretches, V, PAIR) float32, V/m, zero where no tissue touches a sample.
    terms : (S, 3) int64, samples of a cell: variant, offsets along z and y. per_component : samples whose
    outer products are averaged.
    """

    e: np.ndarray
    terms: np.ndarray
    per_component: int


def pack_samples(source: FieldSource, around: Box, combine: str, scratch: Scratch) -> PackedSamples:
    """E of all channels for a box of cells as :func:`read_samples`, laid out for the averaging kernel."""
    samples = _samples(source, combine)
    # One kernel serves all centrings because each component has as many samples as the others.
    (per_component,) = {len(component) for component in samples}
    wanted = [(c, i) for c, component in enumerate(samples) for _, _, i in component]
    variants = sorted(set(wanted))
    terms = [(variants.index((c, i)), k, j) for c, component in enumerate(samples) for k, j, i in component]
    touched = _touched(source, around)
    averaged = combine == "field" and source.centring != "cell"
    kept = np.ascontiguousarray(source.tissue.body[around] if averaged else touched)
    shape = ((source.n_channels + 1) // 2, *kept.shape[:2], -(-(around[2].stop - around[2].start) // STRETCH))
    packed = scratch.array("samples", (*shape, len(variants), PAIR), np.float32)
    if source.n_channels % 2:
        packed[-1] = 0.0
    for channel in range(source.n_channels):
        e = np.ascontiguousarray(source.electric(channel, around), np.complex64)
        if averaged:
            e[:, ~touched] = 0
            _require_finite(e, touched, source.channel_names[channel], around)
            e = _mean(e, SAMPLES[source.centring])
        broken: np.ndarray = np.zeros(kept.shape[0], bool)
        pack_channel(e, kept, channel, np.array(variants), packed, broken)
        if broken.any():
            _require_finite(e, kept, source.channel_names[channel], around)
    return PackedSamples(packed, np.array(terms), per_component)


def packed_bytes_per_cell(source: FieldSource, combine: str) -> int:
    """Memory of :func:`pack_samples` for each cell, bytes."""
    variants = {(c, i) for c, component in enumerate(_samples(source, combine)) for _, _, i in component}
    return (source.n_channels + 1) // 2 * len(variants) * 16


def _samples(source: FieldSource, combine: str) -> _Samples:
    return SAMPLES["cell" if combine == "field" else source.centring]


def _touched(source: FieldSource, around: Box) -> np.ndarray:
    """Samples that matter: those of a cell that is tissue, (samples z, y, x) bool."""
    body = source.tissue.body[around]
    if source.centring == "cell":
        return body
    padded = np.pad(body, ((0, 1),) * 3)
    touched = np.zeros_like(padded)
    for k in (0, 1):
        for j in (0, 1):
            for i in (0, 1):
                touched |= np.roll(padded, (k, j, i), (0, 1, 2))
    return touched


def _require_finite(e: np.ndarray, touched: np.ndarray, name: str, around: Box) -> None:
    bad = ~np.isfinite(e).all(axis=0) & touched
    if bad.any():
        at = [int(v) + s.start for v, s in zip(np.argwhere(bad)[0], around, strict=True)]
        raise InputError(
            f"field of channel {name} is NaN or infinite at {int(bad.sum())} "
            f"samples in tissue, the first at [z, y, x] = {at}; repair the export, or crop it away"
        )


def _mean(e: np.ndarray, samples: _Samples) -> np.ndarray:
    """Mean of the samples of each cell, (3, nz, ny, nx) complex64."""
    nz, ny, nx = (s - 1 for s in e.shape[1:])
    out = np.zeros((3, nz, ny, nx), np.complex128)
    for component, offsets in enumerate(samples):
        for k, j, i in offsets:
            out[component] += e[component, k : k + nz, j : j + ny, i : i + nx]
        out[component] /= len(offsets)
    return out.astype(np.complex64)
