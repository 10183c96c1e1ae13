"""Averaging cubes against a slow, obviously right search, and against closed forms."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import brentq

from vop.averaging.geometry import find_cubes
from vop.cubes import CubeGeometry, CubeKind, VoxelStatus
from vop.errors import InputError
from vop.fields import Tissue
from vop.grid import RectilinearGrid

MASS = 2e-4


def _overlaps(edges: np.ndarray, low: float, high: float) -> np.ndarray:
    return np.clip(np.minimum(edges[1:], high) - np.maximum(edges[:-1], low), 0, None)


class Slow:
    """The rule of IEC/IEEE 62704-1:2017 (from memory), written out voxel by voxel."""

    def __init__(self, grid: RectilinearGrid, rho: np.ndarray, mass: float) -> None:
        self.grid, self.rho, self.wanted = grid, rho, mass
        self.body = rho > 0

    def parts(self, box: tuple[float, ...]) -> list[np.ndarray]:
        ez, ey, ex = self.grid.edges_m
        return [_overlaps(ez, box[4], box[5]), _overlaps(ey, box[2], box[3]), _overlaps(ex, box[0], box[1])]

    def integral(self, density: np.ndarray, box: tuple[float, ...]) -> float:
        return float(np.einsum("kji,k,j,i->", density, *self.parts(box)))

    def box(self, kind: int, side: float, at: tuple[int, int, int]) -> tuple[float, ...]:
        z, y, x = ((e[i], e[i + 1]) for e, i in zip(self.grid.edges_m, at, strict=True))
        out = [v for low, high in (x, y, z) for v in ((low + high - side) / 2, (low + high + side) / 2)]
        if kind >= CubeKind.FACE_X_LOW:
            axis, high_face = divmod(kind - CubeKind.FACE_X_LOW, 2)
            low, high = (x, y, z)[axis]
            out[2 * axis : 2 * axis + 2] = (high - side, high) if high_face else (low, low + side)
        return tuple(out)

    def side(self, kind: int, at: tuple[int, int, int]) -> float:
        def lacking(side: float) -> float:
            return self.integral(self.rho, self.box(kind, side, at)) - self.wanted

        if lacking(10.0) < 0:  # it looks away from the body
            return np.inf
        return float(brentq(lacking, 0.0, 10.0, xtol=1e-15, rtol=1e-14))

    def faces_meet_tissue(self, box: tuple[float, ...]) -> bool:
        hair = 1e-7
        for axis in range(3):
            for end in range(2):
                slab = list(box)
                edge = box[2 * axis + end]
                inner = edge + (hair if end == 0 else -hair)
                slab[2 * axis], slab[2 * axis + 1] = sorted((edge, inner))
                if self.integral(self.body.astype(float), tuple(slab)) <= 0:
                    return False
        return True

    def search(self) -> tuple[dict[tuple[int, ...], int], set[tuple[int, int, float]]]:
        """Status by voxel, and the set of (flat voxel, kind, side)."""
        centred, valid = {}, {}
        for at in map(tuple, np.argwhere(self.body)):
            side = self.side(CubeKind.CENTRED, at)
            box = self.box(CubeKind.CENTRED, side, at)
            background = 1 - self.integral(self.body.astype(float), box) / side**3
            centred[at] = box
            if background <= 1e-12 or (background <= 0.1 and self.faces_meet_tissue(box)):
                valid[at] = side
        ez, ey, ex = self.grid.edges_m
        status, cubes = {}, set()
        for at in centred:
            flat = int(np.ravel_multi_index(at, self.grid.shape))
            if at in valid:
                status[at] = int(VoxelStatus.VALID)
                cubes.add((flat, int(CubeKind.CENTRED), valid[at]))
                continue
            k, j, i = at
            cell = (ex[i], ex[i + 1], ey[j], ey[j + 1], ez[k], ez[k + 1])
            hair = 1e-9
            held = any(
                all(
                    centred[v][2 * a] <= cell[2 * a] + hair
                    and centred[v][2 * a + 1] >= cell[2 * a + 1] - hair
                    for a in range(3)
                )
                for v in valid
            )
            if held:
                status[at] = int(VoxelStatus.USED)
                continue
            status[at] = int(VoxelStatus.UNUSED)
            sides = {kind: self.side(kind, at) for kind in range(2, 8)}
            least = min(sides.values())
            cubes |= {(flat, k, s) for k, s in sides.items() if s**3 <= 1.05 * least**3}
        return status, cubes


def _random_body(seed: int) -> tuple[RectilinearGrid, np.ndarray]:
    """A lumpy body, by turns with a cavity, on a graded grid, from 4 on on a uniform one; invented."""
    rng = np.random.default_rng(seed)
    shape = (9, 10, 8)
    steps = [np.full(s, 0.002) if seed > 3 else rng.uniform(0.0015, 0.003, s) for s in shape]
    edges = [np.concatenate([[0], np.cumsum(s)]) for s in steps]
    grid = RectilinearGrid(edges[2], edges[1], edges[0])
    rho = rng.choice([300.0, 911.0, 1090.0, 1908.0], shape)
    z, y, x = np.meshgrid(*(np.linspace(-1, 1, s) for s in shape), indexing="ij")
    radius = np.sqrt(x**2 + y**2 + z**2)
    rho[(radius > 1.05 + 0.2 * rng.random(shape)) | ((radius < 0.35) & (seed % 2 == 0))] = 0.0
    rho[rng.random(shape) < 0.03] = 0.0
    return grid, rho


def _found(geometry: CubeGeometry) -> set[tuple[int, int, float]]:
    sides = geometry.box_m[:, 1] - geometry.box_m[:, 0]
    return {(int(v), int(k), float(s)) for v, k, s in zip(geometry.voxel, geometry.kind, sides, strict=True)}


@pytest.mark.parametrize("seed", range(6))
def test_cubes_are_those_of_the_slow_search(seed: int) -> None:
    grid, rho = _random_body(seed)
    geometry = find_cubes(grid, Tissue(np.zeros_like(rho), rho), MASS)
    status, wanted = Slow(grid, rho.astype(np.float32).astype(float), MASS).search()
    assert len({*status.values()}) == 3, "the body should have valid, used and unused voxels"
    for at, value in status.items():
        assert geometry.status[at] == value, at
    found = {(v, k): s for v, k, s in _found(geometry)}
    assert found.keys() == {(v, k) for v, k, _ in wanted}
    for v, k, side in wanted:
        assert found[v, k] == pytest.approx(side, rel=1e-9)
    assert np.allclose(geometry.mass_kg, MASS, rtol=1e-9)


def test_ten_grams_of_water_are_a_cube_of_21_544_mm() -> None:
    # Closed form: (0.010 kg / 1000 kg/m³)^(1/3) = 21.544 mm.
    edges = np.linspace(0, 0.06, 31)
    rho = np.full((30, 30, 30), 1000.0)
    geometry = find_cubes(RectilinearGrid(edges, edges, edges), Tissue(0 * rho, rho), 0.010)
    middle = geometry.voxel == np.ravel_multi_index((15, 15, 15), rho.shape)
    side = geometry.box_m[middle, 1] - geometry.box_m[middle, 0]
    assert side == pytest.approx(0.0215443469, rel=1e-9)


def test_a_plateau_of_mass_takes_the_smallest_side() -> None:
    # A block of exactly the wanted mass in the middle of a cavity: the mass does not grow across it.
    edges = np.arange(22) * 0.001
    rho = np.zeros((21, 21, 21))
    rho[8:13, 8:13, 8:13] = 1000.0
    rho[[0, -1]] = 1000.0
    wanted = 1000.0 * 0.005**3
    geometry = find_cubes(RectilinearGrid(edges, edges, edges), Tissue(0 * rho, rho), wanted, "centred-only")
    middle = geometry.voxel == np.ravel_multi_index((10, 10, 10), rho.shape)
    assert geometry.box_m[middle, 1] - geometry.box_m[middle, 0] == pytest.approx(0.005, rel=1e-6)


def test_a_body_of_too_little_mass_keeps_its_points_and_says_so() -> None:
    edges = np.arange(5) * 0.001
    rho = np.full((4, 4, 4), 1000.0)
    geometry = find_cubes(RectilinearGrid(edges, edges, edges), Tissue(0 * rho, rho), 0.010)
    assert len(geometry) == 64
    assert (geometry.kind == CubeKind.POINT).all()
    assert any("less than 0.01 kg around 64 voxels" in note for note in geometry.notes)


def test_a_body_cut_by_the_end_of_the_grid_is_a_warning() -> None:
    edges = np.arange(13) * 0.002
    rho = np.zeros((12, 12, 12))
    rho[:, 3:9, 3:9] = 1000.0
    notes = find_cubes(RectilinearGrid(edges, edges, edges), Tissue(0 * rho, rho), 1e-4).notes
    assert [("z" in n) for n in notes if n.startswith("WARNING")] == [True, True]


@pytest.mark.parametrize("mass", [-0.01, 0.0, np.nan, np.inf])
def test_an_absurd_mass_is_refused(mass: float) -> None:
    edges = np.arange(4) * 0.002
    rho = np.full((3, 3, 3), 1000.0)
    with pytest.raises(InputError, match="average mass"):
        find_cubes(RectilinearGrid(edges, edges, edges), Tissue(0 * rho, rho), mass)


def test_mirroring_the_body_mirrors_the_cubes() -> None:
    grid, rho = _random_body(1)
    mirrored = RectilinearGrid(-grid.x_edges_m[::-1], grid.y_edges_m, grid.z_edges_m)
    one = find_cubes(grid, Tissue(0 * rho, rho), MASS)
    two = find_cubes(mirrored, Tissue(0 * rho, rho[:, :, ::-1]), MASS)
    swap = {2: 3, 3: 2}
    nx = grid.shape[2]
    wanted = {}
    for v, k, s in _found(one):
        i = v % nx
        wanted[v - i + (nx - 1 - i), swap.get(k, k)] = s
    found = {(v, k): s for v, k, s in _found(two)}
    assert found.keys() == wanted.keys()
    assert all(found[key] == pytest.approx(wanted[key], rel=1e-12) for key in wanted)
