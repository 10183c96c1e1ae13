"""From fields to local matrices: closed forms, both edge rules, and averaging done the other way round."""

from __future__ import annotations

import h5py
import numpy as np
import pytest
from mie import MieSphere

import vop
from vop.cubes import CubeKind
from vop.errors import InputError
from vop.fields import FieldSource, Tissue
from vop.grid import Box, RectilinearGrid
from vop.hermitian import unpack
from vop.metadata import Conventions

STATED = Conventions("peak", "+", "forward power")


class ArraySource(FieldSource):
    """Fields that are already in memory, samples as the centring demands."""

    def __init__(self, grid: RectilinearGrid, tissue: Tissue, e: np.ndarray, centring: str = "cell") -> None:
        self.grid, self.tissue, self._e, self.centring = grid, tissue, e, centring
        self.conventions, self.frequency_hz = STATED, 297.2e6
        self.channel_names = tuple(str(c + 1) for c in range(len(e)))
        self.channel_scale = np.ones(len(e))

    def read_raw_electric(self, channel: int, box: Box) -> np.ndarray:
        return self._e[(channel, slice(None), *box)]


def _uniform_grid(count: int, step: float) -> RectilinearGrid:
    edges = (np.arange(count + 1) - count / 2) * step
    return RectilinearGrid(edges, edges, edges)


def _lumpy(n: int, centring: str = "cell", seed: int = 0) -> tuple[RectilinearGrid, Tissue, np.ndarray]:
    """Random tissue on a graded grid with random fields, invented."""
    rng = np.random.default_rng(seed)
    shape = (12, 11, 13)
    edges = [np.concatenate([[0], np.cumsum(rng.uniform(0.002, 0.004, s))]) for s in shape]
    rho = rng.choice([911.0, 1090.0, 1908.0], shape)
    z, y, x = np.meshgrid(*(np.linspace(-1, 1, s) for s in shape), indexing="ij")
    rho[x**2 + y**2 + z**2 > 1.1] = 0.0
    sigma = np.where(rho > 0, rng.uniform(0.05, 2.0, shape), 0.0)
    samples = tuple(s + (centring != "cell") for s in shape)
    e = rng.normal(size=(n, 3, *samples)) + 1j * rng.normal(size=(n, 3, *samples))
    grid = RectilinearGrid(edges[2], edges[1], edges[0])
    return grid, Tissue(sigma, rho), (100 * e).astype(np.complex64)


def test_absorbed_power_of_a_sphere_in_a_plane_wave_is_the_mie_series() -> None:
    # Source: Bohren & Huffman ch. 4 (tests/mie.py): extinction less scattering, and the field inside.
    radius, step = 0.05, 0.0025
    mie = MieSphere(radius, 40.0, 0.5, 297.2e6)
    grid = _uniform_grid(42, step)
    z, y, x = np.meshgrid(*grid.centres_m, indexing="ij")
    body = x**2 + y**2 + z**2 < radius**2
    e = np.zeros((1, 3, *body.shape), np.complex64)
    e[0][:, body] = mie.electric(np.stack([x[body], y[body], z[body]], 1))
    tissue = Tissue(np.where(body, 0.5, 0.0), np.where(body, 1000.0, 0.0))
    model = vop.build_sar_model(ArraySource(grid, tissue, e), average_mass=None)
    found = model.global_matrices["absorbed power"][0, 0].real
    assert found == pytest.approx(mie.absorbed_power_w(), rel=0.01)  # staircase of the surface
    point = 0.5 * 0.5 / 1000.0 * (np.abs(e[0].astype(complex)[:, body]) ** 2).sum(0)
    assert np.allclose(np.asarray(model.packed)[:, 0], point, rtol=1e-6)


def test_a_uniform_field_has_the_same_sar_in_every_cube() -> None:
    # Closed form: SAR = σ|E|²/(2ρ), E_i conj(E_j) for the rest.
    grid = _uniform_grid(16, 0.003)
    tissue = Tissue(np.full((16,) * 3, 0.8), np.full((16,) * 3, 1050.0))
    amplitude = np.array([[3.0, 1j, 0.5], [1.0, 2.0, -1j]])
    e = np.broadcast_to(amplitude[:, :, None, None, None], (2, 3, 16, 16, 16)).astype(np.complex64)
    model = vop.build_sar_model(ArraySource(grid, tissue, e), average_mass=0.001)
    wanted = 0.8 / (2 * 1050.0) * amplitude.conj() @ amplitude.T
    assert np.allclose(model.matrices(), wanted, rtol=1e-6, atol=1e-9)


def test_a_plane_wave_in_a_half_space_is_averaged_exactly_where_it_is_smooth() -> None:
    # Closed form: the mean of e^{−2αz} over a cube of side a about z0 is e^{−2αz0} sinh(αa)/(αa).
    alpha, count = 12.0, 40
    wanted_error = []
    for step in (0.008, 0.001):
        grid = _uniform_grid(int(count * 0.002 / step), step)
        z = grid.centres_m[0]
        e = np.zeros((1, 3, *grid.shape), np.complex64)
        e[0, 0] = np.exp(-alpha * z)[:, None, None]
        tissue = Tissue(np.full(grid.shape, 1.0), np.full(grid.shape, 1000.0))
        model = vop.build_sar_model(ArraySource(grid, tissue, e), average_mass=0.010)
        assert model.cubes is not None
        centred = model.cubes.kind == CubeKind.CENTRED
        side = 0.021544346900318846
        at = model.cubes.centres_m()[centred, 2]
        wanted = np.exp(-2 * alpha * at) * np.sinh(alpha * side) / (alpha * side) / 2000.0
        found = np.asarray(model.packed)[centred, 0]
        wanted_error.append(np.abs(found / wanted - 1).max())
    # A cell holds its centre's value: an error of second order, (αh)²/6 at most for whole cells.
    assert wanted_error[0] < 5e-3
    assert wanted_error[1] < 1e-4
    assert wanted_error[1] < 0.1 * wanted_error[0], "refinement should converge"


@pytest.mark.parametrize("centring", ["node", "edge"])
def test_mean_of_outer_products_dominates_outer_product_of_means(centring: str) -> None:
    # Source: convexity (Jensen); the two readings of the twelve-edge rule.
    source = ArraySource(*_lumpy(4, centring), centring)
    outer = vop.build_sar_model(source, average_mass=0.0005, combine="outer")
    field = vop.build_sar_model(source, average_mass=0.0005, combine="field")
    gap = np.linalg.eigvalsh(outer.matrices() - field.matrices())
    scale = np.linalg.eigvalsh(outer.matrices())[:, -1]
    assert (gap[:, 0] > -1e-5 * scale).all()
    assert (gap[:, -1] > 0.1 * scale).any(), "the two readings should differ"
    assert outer.metadata.details["averaging"]["combine"] == "outer"


def test_edges_take_the_four_parallel_neighbours() -> None:
    # By hand: one cell; Ex lives on four edges that differ in y and z.
    grid = RectilinearGrid([0, 0.01], [0, 0.01], [0, 0.01])  # type: ignore[arg-type]
    tissue = Tissue(np.full((1, 1, 1), 2.0), np.full((1, 1, 1), 1000.0))
    e = np.zeros((1, 3, 2, 2, 2), np.complex64)
    e[0, 0, :, :, 0] = [[1, 2], [3, 4]]
    e[0, 0, :, :, 1] = 1e6  # no sample there: never used
    source = ArraySource(grid, tissue, e, "edge")
    squares = vop.build_sar_model(source, average_mass=None).packed[0, 0]
    assert squares == pytest.approx(2.0 / 2000.0 * (1 + 4 + 9 + 16) / 4, rel=1e-6)
    mean = vop.build_sar_model(source, average_mass=None, combine="field").packed[0, 0]
    assert mean == pytest.approx(2.0 / 2000.0 * 2.5**2, rel=1e-6)


def test_peak_over_matrices_is_the_peak_of_the_averaged_sar() -> None:
    # The other way round: SAR density of each excitation, then averaged by plain numpy over each cube.
    grid, tissue, e = _lumpy(4)
    model = vop.build_sar_model(ArraySource(grid, tissue, e), average_mass=0.0008)
    assert model.cubes is not None
    rng = np.random.default_rng(5)
    w = rng.normal(size=(300, 4)) + 1j * rng.normal(size=(300, 4))
    total = np.einsum("mc,cazyx->mazyx", w, e.astype(complex))
    power = 0.5 * tissue.conductivity_s_m.astype(float) * (np.abs(total) ** 2).sum(axis=1)

    def overlap(edges: np.ndarray, low: float, high: float) -> np.ndarray:
        return np.clip(np.minimum(edges[1:], high) - np.maximum(edges[:-1], low), 0, None)

    ez, ey, ex = grid.edges_m
    sar = np.empty((300, len(model)))
    for r, box in enumerate(model.cubes.box_m):
        parts = overlap(ez, box[4], box[5]), overlap(ey, box[2], box[3]), overlap(ex, box[0], box[1])
        sar[:, r] = np.einsum("mkji,k,j,i->m", power, *parts, optimize=True) / model.cubes.mass_kg[r]
    peak = vop.peak_spatial_average(model, w)
    assert np.allclose(peak.sar_w_kg, sar.max(axis=1), rtol=1e-6)
    assert (peak.sar_w_kg >= sar.max(axis=1) * (1 - 1e-12)).all(), "rounded outward"
    single = model.sar_map(w[0])
    assert np.nanmax(single) == pytest.approx(peak.sar_w_kg[0])
    assert (np.isnan(single) == (tissue.density_kg_m3 == 0)).all()


def test_a_used_voxel_takes_the_largest_of_the_valid_cubes_that_hold_it() -> None:
    grid, tissue, e = _lumpy(2)
    model = vop.build_sar_model(ArraySource(grid, tissue, e), average_mass=0.0008)
    assert model.cubes is not None
    w = np.array([1.0, 0.3j])
    sar = np.einsum("i,vij,j->v", w.conj(), model.matrices(), w).real
    found = model.sar_map(w)
    used = np.argwhere(model.cubes.status == 2)
    assert len(used) > 10
    centred = model.cubes.kind == CubeKind.CENTRED
    box = model.cubes.box_m[centred]
    ez, ey, ex = grid.edges_m
    for k, j, i in used:
        holds = (
            (box[:, 0] <= ex[i] + 1e-9) & (box[:, 1] >= ex[i + 1] - 1e-9)
            & (box[:, 2] <= ey[j] + 1e-9) & (box[:, 3] >= ey[j + 1] - 1e-9)
            & (box[:, 4] <= ez[k] + 1e-9) & (box[:, 5] >= ez[k + 1] - 1e-9)
        )  # fmt: skip
        assert found[k, j, i] == pytest.approx(sar[centred][holds].max(), rel=1e-12)


def test_tiles_do_not_change_the_matrices(monkeypatch: pytest.MonkeyPatch) -> None:
    from vop.averaging import tiles

    source = ArraySource(*_lumpy(9))
    whole = vop.build_sar_model(source, average_mass=0.0008)
    monkeypatch.setattr(tiles, "RESULT_BYTES", 1 << 18)
    parts = vop.build_sar_model(source, average_mass=0.0008)
    assert whole.cubes is not None
    assert parts.cubes is not None
    one = np.lexsort((whole.cubes.kind, whole.cubes.voxel))
    two = np.lexsort((parts.cubes.kind, parts.cubes.voxel))
    assert np.allclose(whole.packed[one], parts.packed[two], rtol=3e-7, atol=1e-9)
    for model in (whole, parts):
        assert np.allclose(
            model.global_matrices["absorbed power"], whole.global_matrices["absorbed power"], rtol=1e-12
        )


def test_a_voxel_a_million_times_below_the_peak_is_averaged_right() -> None:
    # Summed volumes are exact only in exact arithmetic; brute force is the reference.
    grid = _uniform_grid(24, 0.002)
    tissue = Tissue(np.full(grid.shape, 1.0), np.full(grid.shape, 1000.0))
    rng = np.random.default_rng(0)
    e = rng.normal(size=(1, 3, *grid.shape)).astype(np.complex64)
    e[:, :, :4, :4, :4] *= 1e3
    model = vop.build_sar_model(ArraySource(grid, tissue, e), average_mass=1e-3)
    assert model.cubes is not None
    far = int(np.argmax(model.cubes.centres_m().sum(axis=1)))
    box, (ez, ey, ex) = model.cubes.box_m[far], grid.edges_m
    parts = [
        np.clip(np.minimum(edges[1:], box[2 * a + 1]) - np.maximum(edges[:-1], box[2 * a]), 0, None)
        for a, edges in ((2, ez), (1, ey), (0, ex))
    ]
    power = 0.5 * (np.abs(e[0].astype(complex)) ** 2).sum(axis=0)
    wanted = np.einsum("kji,k,j,i->", power, *parts) / model.cubes.mass_kg[far]
    assert model.packed[far, 0] < 1e-5 * model.packed[:, 0].max()
    assert model.packed[far, 0] == pytest.approx(wanted, rel=2e-7)


def test_matrices_of_the_file_are_those_in_memory(tmp_path: object) -> None:
    from pathlib import Path

    path = Path(str(tmp_path)) / "model.h5"
    source = ArraySource(*_lumpy(3))
    memory = vop.build_sar_model(source, average_mass=0.0008)
    disk = vop.build_sar_model(source, average_mass=0.0008, path=path)
    assert np.array_equal(memory.packed, disk.packed)
    assert memory.digest() == disk.digest()
    with h5py.File(path) as handle:
        assert np.allclose(unpack(handle["local/packed"][()]), memory.matrices())


@pytest.mark.parametrize("combine", ["both", ""])
def test_an_unknown_combination_is_refused(combine: str) -> None:
    with pytest.raises(InputError, match="outer, field"):
        vop.build_sar_model(ArraySource(*_lumpy(1)), combine=combine)


def test_turning_the_body_by_a_quarter_turns_the_matrices_with_it() -> None:
    # Symmetry: (x, y) → (−y, x); rows are compared voxel by voxel, faces by where they went.
    grid, tissue, e = _lumpy(3)
    turned_grid = RectilinearGrid(-grid.y_edges_m[::-1], grid.x_edges_m, grid.z_edges_m)

    def turn(a: np.ndarray) -> np.ndarray:  # new[k, j', i'] with j' = i and i' = ny − 1 − j
        return np.swapaxes(a, -1, -2)[..., ::-1]

    turned_e = np.stack([-turn(e[:, 1]), turn(e[:, 0]), turn(e[:, 2])], axis=1)
    turned_tissue = Tissue(turn(tissue.conductivity_s_m), turn(tissue.density_kg_m3))
    one = vop.build_sar_model(ArraySource(grid, tissue, e), average_mass=0.0008)
    two = vop.build_sar_model(ArraySource(turned_grid, turned_tissue, turned_e), average_mass=0.0008)
    assert one.cubes is not None
    assert two.cubes is not None
    faces = {2: 4, 3: 5, 4: 3, 5: 2}
    k, j, i = np.unravel_index(one.cubes.voxel, grid.shape)
    moved = np.ravel_multi_index((k, i, grid.shape[1] - 1 - j), turned_grid.shape)
    wanted = {(int(v), faces.get(int(c), int(c))): r for r, (v, c) in
              enumerate(zip(moved, one.cubes.kind, strict=True))}  # fmt: skip
    found = {(int(v), int(c)): r for r, (v, c) in
             enumerate(zip(two.cubes.voxel, two.cubes.kind, strict=True))}  # fmt: skip
    assert found.keys() == wanted.keys()
    assert any(key[1] > 1 for key in found), "no face-anchored cube: the test would show little"
    pairs = np.array([(wanted[key], found[key]) for key in wanted])
    scale = np.abs(one.packed).max(axis=1)[pairs[:, 0], None]
    assert (np.abs(one.packed[pairs[:, 0]] - two.packed[pairs[:, 1]]) <= 4e-7 * scale).all()
