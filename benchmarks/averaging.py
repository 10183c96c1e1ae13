"""Exact averaging cubes against a fixed-size box filter, side by side in one run.

    python benchmarks/averaging.py [--large] [--channels 8]

Columns: the box filter is scipy.ndimage.uniform_filter applied matrix entry by matrix entry to the same
grid (what a user would script; it has one size for all cubes, knows no surface, and its inputs are taken
as ready); the script is the same with the products of fields that it needs; ours finds every cube of
IEC/IEEE 62704-1 by its mass, forms the products and averages them. The second call of everything is timed.
--large adds a body of 5 million tissue voxels, with the peak memory of the process.
"""

from __future__ import annotations

import argparse
import resource
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.ndimage import uniform_filter

import vop
from vop.averaging.geometry import find_cubes
from vop.fields import FieldSource, Tissue
from vop.grid import Box, RectilinearGrid
from vop.metadata import Conventions

STEP_M = 0.002


class Ball(FieldSource):
    """Invented: a ball of shells of two tissues, one plane wave per channel; cheap to make box by box."""

    centring = "cell"
    frequency_hz = 297.2e6
    conventions = Conventions("peak", "+", "forward power")

    def __init__(self, cells: int, n_channels: int) -> None:
        edges = (np.arange(cells + 1) - cells / 2) * STEP_M
        self.grid = RectilinearGrid(edges, edges, edges)
        z, y, x = (a.astype(np.float32) for a in self.grid.centres_m)
        radius = np.sqrt(z[:, None, None] ** 2 + y[None, :, None] ** 2 + x[None, None, :] ** 2)
        body = radius < (cells / 2 - 1.5) * STEP_M
        shell = (radius / np.float32(3 * STEP_M)).astype(np.int16) % 2
        self.tissue = Tissue(
            np.where(body, np.where(shell == 0, 0.8, 0.1), 0.0).astype(np.float32),
            np.where(body, np.where(shell == 0, 1090.0, 911.0), 0.0).astype(np.float32),
        )
        rng = np.random.default_rng(0)
        self.channel_names = tuple(str(c + 1) for c in range(n_channels))
        self.channel_scale = np.ones(n_channels)
        self._k = rng.normal(size=(n_channels, 3)) * 40
        self._p = (rng.normal(size=(n_channels, 3)) + 1j * rng.normal(size=(n_channels, 3))).astype(
            np.complex64
        )

    def read_raw_electric(self, channel: int, box: Box) -> np.ndarray:
        z, y, x = (
            np.exp(1j * k * a[s]).astype(np.complex64)
            for k, a, s in zip(self._k[channel], self.grid.centres_m, box, strict=True)
        )
        wave = z[:, None, None] * (y[:, None] * x[None, :])[None]
        return self._p[channel][:, None, None, None] * wave


@dataclass(frozen=True)
class Timed:
    """Seconds of the best of a few calls after a first that compiles."""

    seconds: float

    @classmethod
    def of(cls, call: Callable[[], object], repeats: int = 2) -> Timed:
        call()
        best = np.inf
        for _ in range(repeats):
            began = time.perf_counter()
            call()
            best = min(best, time.perf_counter() - began)
        return cls(best)


def box_filter(source: Ball, with_products: bool) -> None:
    """The script: one size for all cubes, matrix entry by matrix entry."""
    size = round((0.010 / 1000.0) ** (1 / 3) / STEP_M)
    whole = (slice(None),) * 3
    n = source.n_channels
    weight = 0.5 * source.tissue.conductivity_s_m
    mass = uniform_filter(source.tissue.density_kg_m3, size, mode="constant")
    e = np.array([source.electric(c, whole) for c in range(n)]) if with_products else None
    ready = np.random.default_rng(0).random(source.grid.shape, dtype=np.float32)
    with np.errstate(divide="ignore", invalid="ignore"):
        for i in range(n):
            for j in range(i, n):
                if e is not None:
                    product = weight * (e[i].conj() * e[j]).sum(axis=0)
                    parts = (product.real, product.imag) if j > i else (product.real,)
                else:
                    parts = (ready, ready) if j > i else (ready,)
                for part in parts:
                    _ = uniform_filter(part, size, mode="constant") / mass


def row(cells: int, n: int) -> None:
    """One line of the table."""
    source = Ball(cells, n)
    model = vop.build_sar_model(source)
    assert model.cubes is not None
    cubes = Timed.of(lambda: find_cubes(source.grid, source.tissue, 0.010)).seconds
    ours = Timed.of(lambda: vop.build_sar_model(source)).seconds
    alone = Timed.of(lambda: box_filter(source, False), 1).seconds
    script = Timed.of(lambda: box_filter(source, True), 1).seconds
    print(
        f"{int(source.tissue.body.sum()):>10}{n:>10}{len(model):>10}{cubes:>11.2f}{ours:>9.2f}"
        f"{alone:>12.2f}{script:>9.2f}{ours / alone:>11.2f}{ours / script:>9.2f}",
        flush=True,
    )


def main() -> int:
    """Print the table."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--large", action="store_true", help="5 million tissue voxels as well")
    parser.add_argument("--channels", type=int, default=8)
    arguments = parser.parse_args()
    print(
        f"{'voxels':>10}{'channels':>10}{'matrices':>10}{'cubes s':>11}{'ours s':>9}"
        f"{'filter s':>12}{'script s':>9}{'to filter':>11}{'to script':>9}"
    )
    for cells, n in ((60, 8), (60, 16), (60, 32), (129, arguments.channels)):
        row(cells, n)
    if arguments.large:
        source = Ball(216, 8)
        before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
        began = time.perf_counter()
        import tempfile
        from pathlib import Path

        with tempfile.TemporaryDirectory() as folder:
            model = vop.build_sar_model(source, path=Path(folder) / "model.h5")
            seconds = time.perf_counter() - began
            peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
            print(
                f"{int(source.tissue.body.sum()):>10}{8:>10}{len(model):>10}: {seconds:.1f} s to a file; "
                f"peak memory {peak / 2**20:.2f} GiB, of which {before / 2**20:.2f} GiB before it began"
            )
    return 0


if __name__ == "__main__":
    sys.exit(main())
