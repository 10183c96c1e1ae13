"""Exact averaging cubes against a fixed-size box filter, side by side in one run.

    python benchmarks/averaging.py [--large] [--channels 8]

The box filter is scipy.ndimage.uniform_filter applied matrix entry by matrix entry to the same grid (what a
user would script; it has one size for all cubes, knows no surface, and its inputs are taken as ready); the
script is the same with the products of fields that it needs; ours finds every cube of IEC/IEEE 62704-1 by
its mass, reads fields, forms products, averages them and rounds them outward. "cubes" is the share of ours
that depends on tissue alone and "kernel" that of products and averages. Seconds by the clock, the best of a
few calls after one that compiles; in brackets processor seconds of all threads together, which other work on
the machine disturbs less. --large adds a body of 5 million tissue voxels, with the peak memory.
"""

from __future__ import annotations

import argparse
import resource
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numba
import numpy as np
from scipy.ndimage import uniform_filter

import vop
from vop.averaging import apply
from vop.averaging.apply import average_tile, tiles_for
from vop.averaging.geometry import find_cubes
from vop.averaging.scratch import Scratch
from vop.cubes import CubeGeometry
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
    """Seconds by the clock and of the processor: the best of a few calls after a first that compiles."""

    clock: float
    processor: float

    @classmethod
    def of(cls, call: Callable[[], object], repeats: int = 3) -> Timed:
        call()
        clock = processor = np.inf
        for _ in range(repeats):
            began, spent = time.perf_counter(), time.process_time()
            call()
            clock = min(clock, time.perf_counter() - began)
            processor = min(processor, time.process_time() - spent)
        return cls(clock, processor)

    def __str__(self) -> str:
        return f"{self.clock:.2f} ({self.processor:.2f})"


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


def average_all(source: Ball, cubes: CubeGeometry) -> Callable[[], Timed]:
    """Products and averages of all tiles, without reading fields, rounding or keeping anything."""
    tiles = tiles_for(source, cubes, "outer")
    taken = [cubes.take(t.rows) for t in tiles]
    seconds = []
    kernel = apply.average_blocks

    def timed(*arguments: object) -> None:
        began = time.perf_counter(), time.process_time()
        kernel(*arguments)
        seconds.append((time.perf_counter() - began[0], time.process_time() - began[1]))

    def run() -> Timed:
        seconds.clear()
        apply.average_blocks = timed
        try:
            scratch = Scratch()
            for tile, mine in zip(tiles, taken, strict=True):
                average_tile(source, tile, mine, "outer", scratch)
        finally:
            apply.average_blocks = kernel
        return Timed(*(sum(column) for column in zip(*seconds, strict=True)))

    return run


def row(cells: int, n: int) -> tuple[int, Timed]:
    """One line of the table; tissue voxels, and time of ours."""
    source = Ball(cells, n)
    cubes = find_cubes(source.grid, source.tissue, 0.010)
    search = Timed.of(lambda: find_cubes(source.grid, source.tissue, 0.010))
    run = average_all(source, cubes)
    kernel = min((run() for _ in range(3)), key=lambda t: t.clock)
    ours = Timed.of(lambda: vop.build_sar_model(source))
    alone = Timed.of(lambda: box_filter(source, False))
    script = Timed.of(lambda: box_filter(source, True))
    voxels = int(source.tissue.body.sum())
    print(
        f"{voxels:>9}{n:>4}{len(cubes):>9}{search!s:>13}{kernel!s:>14}{ours!s:>14}{alone!s:>14}{script!s:>14}"
        f"{ours.clock / alone.clock:>8.2f}{ours.clock / script.clock:>8.2f}",
        flush=True,
    )
    return voxels, ours


def main() -> int:
    """Print the table."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--large", action="store_true", help="5 million tissue voxels as well")
    parser.add_argument("--channels", type=int, default=8)
    arguments = parser.parse_args()
    print(f"{numba.get_num_threads()} threads for ours, one for the filter and the script")
    print(
        f"{'voxels':>9}{'n':>4}{'matrices':>9}{'cubes':>13}{'kernel':>14}{'ours':>14}{'filter':>14}{'script':>14}"
        f"{'/filter':>8}{'/script':>8}"
    )
    sizes = (48, 8), (60, 8), (60, 16), (60, 32), (101, arguments.channels), (129, arguments.channels)
    times = {size: row(*size) for size in sizes}
    few, many = times[48, 8], times[101, arguments.channels]
    if arguments.channels == 8:
        print(
            f"{many[0] / few[0]:.2f} times the voxels take {many[1].clock / few[1].clock:.2f} times the time "
            f"({many[1].processor / few[1].processor:.2f} of the processor)"
        )
    few, many = times[60, 8], times[60, 32]
    print(
        f"4 times the channels take {many[1].clock / few[1].clock:.2f} times the time "
        f"({many[1].processor / few[1].processor:.2f} of the processor); n² grows 16 times"
    )
    if arguments.large:
        source = Ball(216, 8)
        before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
        began = time.perf_counter()
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
