"""Corners of the averaging rule: ties, plateaus, islands, and bodies of hardly enough mass."""

from __future__ import annotations

import numpy as np
import pytest

from vop.averaging.geometry import find_cubes, summed_volumes
from vop.cubes import CubeGeometry, CubeKind, VoxelStatus
from vop.fields import Tissue
from vop.grid import RectilinearGrid
from vop.kernels.cube_search import face_cubes

STEP = 0.002


def _grid(*shape: int) -> RectilinearGrid:
    z, y, x = (np.arange(s + 1) * STEP for s in shape)
    return RectilinearGrid(x, y, z)


def _cubes(rho: np.ndarray, mass: float) -> CubeGeometry:
    return find_cubes(_grid(*rho.shape), Tissue(np.zeros_like(rho), rho), mass)


def test_a_cube_of_exactly_three_cells_holds_all_twenty_seven() -> None:
    # By hand: in a block of 5³ cells a cube of 3³ is free of background about the inner 27 cells; any other
    # holds a third of background. Corner cells are wholly inside a valid cube by a tie.
    rho = np.zeros((9, 9, 9))
    rho[2:7, 2:7, 2:7] = 1000.0
    counts = _cubes(rho, 27 * 1000.0 * STEP**3).counts()
    assert counts["voxels valid"] == 27
    assert counts["voxels used"] == 125 - 27
    assert counts["matrices"] == 27


@pytest.mark.parametrize(("beyond", "competes"), [(-1e-7, True), (5e-10, True), (1e-7, False)])
def test_a_face_cube_of_five_percent_more_volume_is_a_tie_that_competes(
    beyond: float, competes: bool
) -> None:
    # By hand: density 1000 from the voxel's low face upward, a lesser one below it, such that the cube
    # towards low x has 1.05·(1 + beyond) of the volume of that towards high x.
    cells, at = 40, 20
    small = 6.3 * STEP
    wanted = 1000.0 * small**3
    large = small * (1.05 * (1 + beyond)) ** (1 / 3)
    rho = np.full((cells,) * 3, 1000.0)
    rho[:, :, :at] = (wanted / large**2 - 1000.0 * STEP) / (large - STEP)
    edges = np.arange(cells + 1) * STEP
    boxes, chosen = np.zeros((1, 6, 6)), np.zeros((1, 6), bool)
    table = summed_volumes(rho * STEP**3, np.full(rho.shape, STEP**3))
    voxel = np.full((1, 3), at, np.int64)
    face_cubes(table, rho, edges, edges, edges, voxel, wanted, 1.0, boxes, chosen)
    sides = boxes[0, :, 1] - boxes[0, :, 0]
    assert sides[0] == pytest.approx(small, rel=1e-12)
    assert sides[1] == pytest.approx(large, rel=1e-12) or not competes
    assert list(chosen[0]) == [True, competes, True, True, True, True]


@pytest.mark.parametrize(("beyond", "valid"), [(-1e-7, True), (5e-10, True), (1e-7, False)])
def test_ten_percent_of_background_is_a_tie_that_is_valid(beyond: float, valid: bool) -> None:
    # By hand: a gap of air across the body is 0.1·(1 + beyond) of the cube about the middle voxel.
    gap = 0.002
    side = gap / (0.1 * (1 + beyond))
    wanted = 1000.0 * side**2 * (side - gap)
    below = np.arange(-20, 4) * STEP - STEP / 2
    along = np.concatenate([below, below[-1] + gap + np.arange(18) * STEP])
    across = np.arange(-20, 22) * STEP - STEP / 2
    rho = np.full((along.size - 1, 41, 41), 1000.0)
    rho[below.size - 1] = 0.0
    geometry = find_cubes(RectilinearGrid(across, across, along), Tissue(0 * rho, rho), wanted)
    middle = np.ravel_multi_index((20, 20, 20), rho.shape)
    status = geometry.status.flat[middle]
    assert (status == VoxelStatus.VALID) == valid
    if valid:
        (box,) = geometry.box_m[geometry.voxel == middle]
        assert box == pytest.approx(np.array([-1, 1, -1, 1, -1, 1]) * side / 2, rel=1e-12)


def test_no_voxel_vanishes_in_a_body_of_hardly_more_than_the_mass() -> None:
    # Porous, so that no centred cube is valid; from its middle no face-anchored cube finds the mass.
    rho = np.full((9, 9, 9), 1000.0)
    rho[np.indices(rho.shape).sum(axis=0) % 4 == 0] = 0.0
    total = rho.sum() * STEP**3
    for share in (0.45, 0.6, 0.75, 0.99):
        geometry = _cubes(rho, share * total)
        served = np.zeros(rho.shape, bool)
        served.flat[geometry.voxel] = True
        assert (served | (geometry.status == VoxelStatus.USED) == (rho > 0)).all()
        middle = np.ravel_multi_index((4, 4, 5), rho.shape)
        kinds = set(geometry.kind[geometry.voxel == middle])
        assert (kinds == {CubeKind.POINT}) == (share >= 0.75)
        assert any("around" in note for note in geometry.notes) == (share >= 0.75)


def test_pieces_of_too_little_mass_are_named_in_a_warning() -> None:
    rho = np.zeros((12, 12, 30))
    rho[2:10, 2:10, 2:10] = 1000.0
    rho[5:8, 5:8, 14:17] = 1000.0
    rho[2, 2, 25] = 1000.0
    geometry = _cubes(rho, 60 * 1000.0 * STEP**3)
    (note,) = [n for n in geometry.notes if "separate pieces" in n]
    assert "2 of 3 separate pieces of tissue hold less than" in note
    assert "(28 voxels" in note
    # Their cubes reach over background to the mass that the rule asks for.
    island = np.ravel_multi_index((6, 6, 15), rho.shape)
    assert (geometry.voxel == island).any()
    assert np.allclose(geometry.mass_kg, 60 * 1000.0 * STEP**3, rtol=1e-9)


def test_a_tissue_that_touches_by_a_corner_is_no_island() -> None:
    rho = np.zeros((12, 12, 12))
    rho[2:9, 2:9, 2:9] = 1000.0
    rho[9, 9, 9] = 1000.0
    assert not [n for n in _cubes(rho, 60 * 1000.0 * STEP**3).notes if "separate" in n]


@pytest.mark.parametrize("axis", [0, 1, 2])
@pytest.mark.parametrize("graded", [False, True])
def test_a_mirrored_body_has_mirrored_cubes(axis: int, graded: bool) -> None:
    # Symmetry, to 1e-12 relative: the search visits mirrored voxels in another order, from other guesses.
    rng = np.random.default_rng(axis)
    shape = (22, 20, 24)
    steps = [rng.uniform(0.0015, 0.003, s) if graded else np.full(s, STEP) for s in shape]
    z, y, x = np.meshgrid(*(np.linspace(-1, 1, s) for s in shape), indexing="ij")
    radius = np.sqrt(x**2 + y**2 + z**2)
    rho = np.where(radius // 0.11 % 2 == 0, 911.0, 1090.0)
    rho[(radius > 0.95) | (radius < 0.25)] = 0.0
    rho[rng.random(shape) < 0.01] = 0.0

    def found(steps: list[np.ndarray], rho: np.ndarray) -> CubeGeometry:
        z, y, x = (np.concatenate([[0.0], np.cumsum(s)]) for s in steps)
        return find_cubes(RectilinearGrid(x, y, z), Tissue(0 * rho, rho), 0.001)

    one = found(steps, rho)
    two = found([s[::-1] if a == axis else s for a, s in enumerate(steps)], np.flip(rho, axis))
    at = list(np.unravel_index(one.voxel, shape))
    at[axis] = shape[axis] - 1 - at[axis]
    low = CubeKind.FACE_X_LOW + 2 * (2 - axis)
    kind = np.where(one.kind // 2 == low // 2, one.kind ^ 1, one.kind)
    order = np.lexsort((kind, np.ravel_multi_index(tuple(at), shape)))
    assert (kind > 1).any()
    assert np.array_equal(np.ravel_multi_index(tuple(at), shape)[order], two.voxel)
    assert np.array_equal(kind[order], two.kind)
    sides = [g.box_m[:, 1] - g.box_m[:, 0] for g in (one, two)]
    assert np.abs(sides[0][order] / sides[1] - 1).max() < 1e-12
    assert np.abs(one.mass_kg / 0.001 - 1).max() < 1e-12
