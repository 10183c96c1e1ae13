"""Limits of IEC 60601-2-33, and local matrices as fractions of them."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from conftest import random_matrices

from vop.averaging.geometry import find_cubes
from vop.cubes import CubeKind, VoxelStatus
from vop.errors import InputError
from vop.exposure import sar_map
from vop.fields import Tissue
from vop.grid import RectilinearGrid
from vop.limits import (
    BUILT_IN,
    FIRST_LEVEL,
    NORMAL,
    as_fraction_of_limit,
    cube_limits,
    global_fractions,
    load_limits,
)
from vop.metadata import Metadata, Reference
from vop.regions import Region, Regions
from vop.sarmodel import SarModel


def test_the_limits_of_the_standard_as_recalled() -> None:
    # IEC 60601-2-33, clause on SAR limits (201.12.4.103; number quoted from memory). W/kg over 6 min;
    # whole-body, partial-body and head rows from secondary sources, local rows from memory.
    assert (NORMAL.whole_body, NORMAL.head) == (2.0, 3.2)
    assert (FIRST_LEVEL.whole_body, FIRST_LEVEL.head) == (4.0, 3.2)
    assert NORMAL.local == {"head": 10, "trunk": 10, "extremity": 20}
    assert FIRST_LEVEL.local == {"head": 20, "trunk": 20, "extremity": 40}
    for table in BUILT_IN.values():
        assert table.local_mass_kg == 0.010
        assert [(w.seconds, w.factor) for w in table.windows] == [(360, 1), (10, 2)]
        assert "check" in table.source
        assert "memory" in table.marks["local"]


def test_the_partial_body_limit_meets_the_whole_body_limit_when_all_is_exposed() -> None:
    # 10 − 8r and 10 − 6r at r = 1 are the whole-body limits 2 and 4: the rows must agree there.
    for table in BUILT_IN.values():
        assert table.partial_body_w_kg(1.0) == table.whole_body
        assert table.partial_body_w_kg(1e-9) == pytest.approx(10)
    assert NORMAL.partial_body_w_kg(0.25) == 8.0
    for r in (0.0, -0.1, 1.1, np.nan):
        with pytest.raises(InputError, match="between 0 and 1"):
            NORMAL.partial_body_w_kg(r)


def test_heat_lowers_the_whole_body_limit_of_the_first_level_down_to_two() -> None:
    # 0.25 W/kg per °C above 25 °C down to 2 (read in a secondary source): 33 °C is where it ends.
    wanted = {20: 4.0, 25: 4.0, 27: 3.5, 33: 2.0, 40: 2.0}
    assert {t: FIRST_LEVEL.at_ambient(t).whole_body for t in wanted} == wanted
    assert NORMAL.at_ambient(40) == NORMAL


TABLE = """
mode = "house rule"
source = "an invented committee"
whole_body = 1.5
partial_body = [9, 7]
[local]
head = 5
trunk = 6.5
extremity = 15
[[windows]]
seconds = 60
factor = 1
[marks]
local = "invented"
"""


def test_other_limits_come_from_a_file(tmp_path: Path) -> None:
    (tmp_path / "limits.toml").write_text(TABLE)
    table = load_limits(tmp_path / "limits.toml")
    assert table.local == {"head": 5, "trunk": 6.5, "extremity": 15}
    assert (table.whole_body, table.head, table.partial_body_w_kg(0.5)) == (1.5, None, 5.5)
    assert table.windows[0].seconds == 60
    assert table.record()["marks"] == {"local": "invented"}
    assert load_limits("first level") is FIRST_LEVEL


@pytest.mark.parametrize(
    ("old", "new", "why"),
    [
        ('mode = "house rule"', "", "mode missing"),
        ("head = 5", "", "local limits are needed"),
        ("head = 5", "head = -5", "must be positive"),
        ("head = 5", "head = nan", "must be positive"),
        ("head = 5", 'head = "five"', "not of the right kind"),
        ("whole_body = 1.5", "wholebody = 1.5", "wholebody is not known"),
        ("[9, 7]", "[9]", "2 numbers"),
        ("[9, 7]", "[9, 9]", "r = 1"),
        ("seconds = 60", "second = 60", "seconds"),
        ("source =", "= 3 #", "not a TOML file"),
    ],
)
def test_a_table_with_a_mistake_is_refused_by_its_name(tmp_path: Path, old: str, new: str, why: str) -> None:
    path = tmp_path / "limits.toml"
    path.write_text(TABLE.replace(old, new))
    with pytest.raises(InputError, match=why) as caught:
        load_limits(path)
    assert str(path) in str(caught.value)


def test_an_unknown_mode_lists_the_known_ones() -> None:
    with pytest.raises(InputError, match="'normal', 'first level'"):
        load_limits("second level")


def _model(n: int = 3) -> SarModel:
    """A block of 44 mm by 40 mm by 48 mm of water-like tissue in air: centred, used and face cubes."""
    grid = RectilinearGrid(*(np.linspace(0, 0.004 * s, s + 1) for s in (13, 12, 14)))
    rho = np.zeros(grid.shape, np.float32)
    rho[1:-1, 1:-1, 1:-1] = 1000
    cubes = find_cubes(grid, Tissue(rho / 2000, rho), 0.010)
    assert {VoxelStatus.VALID, VoxelStatus.USED, VoxelStatus.UNUSED} <= set(cubes.status.ravel())
    q = random_matrices(np.random.default_rng(1), len(cubes), n)
    model = SarModel.from_matrices(q)
    meta = Metadata(Reference("forward power"), model.metadata.channel_names, warnings=("an older one",))
    return replace(model, cubes=cubes, metadata=meta)


def _half_and_half(model: SarModel, low: Region, high: Region) -> Regions:
    assert model.cubes is not None
    body = model.cubes.status != VoxelStatus.BACKGROUND
    code = np.where(np.arange(body.shape[2]) < 6, low, high) * body
    return Regions(code, np.zeros(body.shape, bool))


def _brute_force_limits(model: SarModel, regions: Regions) -> np.ndarray:
    """The smallest limit over the voxels that each cube gives a value to, voxel by voxel."""
    assert model.cubes is not None
    c = model.cubes
    limit = np.array([np.inf, 10.0, 10.0, 20.0])[regions.code]
    limit[regions.excluded] = np.inf
    z, y, x = c.grid.edges_m
    out = []
    for voxel, kind, box in zip(c.voxel, c.kind, c.box_m, strict=True):
        at = np.unravel_index(voxel, c.status.shape)
        values = [limit[at]]
        if kind == CubeKind.CENTRED:
            hair = 1e-9 * 0.004
            inside = [
                np.flatnonzero((e[:-1] >= lo - hair) & (e[1:] <= hi + hair))
                for e, lo, hi in ((z, box[4], box[5]), (y, box[2], box[3]), (x, box[0], box[1]))
            ]
            cells = np.ix_(*inside)
            values += list(limit[cells][c.status[cells] == VoxelStatus.USED])
        out.append(min(values))
    return np.array(out)


def test_the_smallest_limit_among_the_voxels_a_cube_serves_binds() -> None:
    model = _model()
    regions = _half_and_half(model, Region.TRUNK, Region.EXTREMITY)
    found = cube_limits(model, regions, NORMAL)
    np.testing.assert_array_equal(found, _brute_force_limits(model, regions))
    assert set(found) == {10.0, 20.0}
    # Some cubes of the extremity serve voxels of the trunk; a rule by centres would miss them.
    assert model.cubes is not None
    own = np.array([np.inf, 10.0, 10.0, 20.0])[regions.code.ravel()[model.cubes.voxel]]
    assert (found < own).any()


def test_the_largest_fraction_over_matrices_is_the_largest_over_voxels() -> None:
    # The definition, from the SAR map: each voxel's averaged SAR over its own region's limit.
    model = _model()
    regions = _half_and_half(model, Region.EXTREMITY, Region.HEAD)
    fractions = as_fraction_of_limit(model, regions, NORMAL)
    rng = np.random.default_rng(2)
    limit = np.array([np.inf, 10.0, 10.0, 20.0])[regions.code]
    for _ in range(20):
        w = rng.normal(size=3) + 1j * rng.normal(size=3)
        by_voxel = np.nanmax(sar_map(model, w) / limit)
        by_matrix = np.einsum("i,vij,j->v", w.conj(), fractions.matrices(), w).real.max()
        assert by_matrix == pytest.approx(by_voxel, rel=1e-5)
        assert by_matrix >= by_voxel * (1 - 1e-12)


def test_no_fraction_is_rounded_down() -> None:
    model = _model()
    regions = _half_and_half(model, Region.HEAD, Region.EXTREMITY)
    table = replace(NORMAL, local={"head": 7.3, "trunk": 1.0, "extremity": 19.9})
    fractions = as_fraction_of_limit(model, regions, table)
    exact = model.matrices().astype(np.clongdouble) / cube_limits(model, regions, table)[:, None, None]
    rest = (fractions.matrices().astype(np.clongdouble) - exact).astype(complex)
    assert (np.linalg.eigvalsh(rest)[:, 0] >= 0).all()
    assert np.abs(rest).max() < 1e-5 * np.abs(exact).max()


def test_excluded_voxels_ask_nothing_for_themselves_and_leave_their_neighbours_alone() -> None:
    model = _model()
    assert model.cubes is not None
    everywhere = _half_and_half(model, Region.TRUNK, Region.TRUNK)
    out = np.zeros(everywhere.code.shape, bool)
    out[:, :, :6] = True
    regions = Regions(everywhere.code, out, ("an invented plate",))
    limit = cube_limits(model, regions, NORMAL)
    np.testing.assert_array_equal(limit, _brute_force_limits(model, regions))
    fractions = as_fraction_of_limit(model, regions, NORMAL)
    kept = np.isfinite(limit)
    assert (~kept).any()
    assert len(fractions) == kept.sum()
    # Neighbours keep their matrices to the bit: mass and power of what is excluded stay in their cubes.
    untouched = as_fraction_of_limit(model, everywhere, NORMAL)
    np.testing.assert_array_equal(fractions.packed, untouched.packed[kept])
    # A cube centred on an excluded voxel that serves used voxels outside stays.
    own = out.ravel()[model.cubes.voxel]
    assert (own & kept).any()


def test_what_the_numbers_are_and_what_was_excluded_head_the_warnings(tmp_path: Path) -> None:
    model = _model()
    everywhere = _half_and_half(model, Region.TRUNK, Region.TRUNK)
    out = np.zeros(everywhere.code.shape, bool)
    out[5, 5, 5] = True
    fractions = as_fraction_of_limit(model, Regions(everywhere.code, out, ("a plate",)), FIRST_LEVEL)
    fractions.save(tmp_path / "fractions.h5")
    meta = SarModel.load(tmp_path / "fractions.h5").metadata
    assert meta.warnings[0].startswith("EXCLUDED from limits: 1 of")
    assert "not W/kg" in meta.warnings[1]
    assert meta.warnings[-1] == "an older one"
    assert meta.measure == "fraction of limit"
    assert meta.matrix_unit == "fraction of limit per W"
    assert meta.domain.limits_mode == "first level"
    assert meta.details["fraction_of_limit"]["exclusions"] == ["a plate"]
    with pytest.raises(InputError, match="fraction of limit"):
        sar_map(fractions, np.ones(3))
    with pytest.raises(InputError, match="fraction of limit already"):
        as_fraction_of_limit(fractions, everywhere, FIRST_LEVEL)


def test_limits_that_do_not_belong_to_the_model_are_refused() -> None:
    model = _model()
    regions = _half_and_half(model, Region.TRUNK, Region.TRUNK)
    assert model.cubes is not None
    gram = replace(model, cubes=replace(model.cubes, average_mass_kg=0.001))
    points = replace(model, cubes=replace(model.cubes, average_mass_kg=None))
    other = Regions(np.zeros((2, 2, 2), np.uint8), np.zeros((2, 2, 2), bool))
    hole = Regions(regions.code * (np.arange(14) != 7)[:, None, None].astype(np.uint8), regions.excluded)
    everything = Regions(regions.code, regions.code > 0, ("all of it",))
    cases = [
        (replace(model, cubes=None), regions, "bare matrices"),
        (gram, regions, "averaged over 10 g, the model has SAR averaged over 1 g"),
        (points, regions, "point SAR"),
        (model, other, "differ in shape"),
        (model, hole, "have no region"),
        (model, everything, "every voxel is excluded"),
    ]
    for which, where, why in cases:
        with pytest.raises(InputError, match=why):
            as_fraction_of_limit(which, where, NORMAL)


def test_global_matrices_are_divided_by_their_own_limits() -> None:
    one = np.eye(2, dtype=complex)
    found = global_fractions(
        {"whole body": one, "head": one, "partial body": one, "absorbed power": one}, NORMAL, 0.25
    )
    assert {k: v[0, 0].real for k, v in found.items()} == pytest.approx(
        {"whole body": 1 / 2, "head": 1 / 3.2, "partial body": 1 / 8}
    )
    with pytest.raises(InputError, match="exposed mass"):
        global_fractions({"partial body": one}, NORMAL)
