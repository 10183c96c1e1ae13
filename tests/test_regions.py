"""Regions of the body, and SAR of whole volumes as matrices."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
import scipy.io
from conftest import write_channel_hdf5

from vop.build import absorbed_power, build_sar_model
from vop.errors import InputError
from vop.fields import FieldSource, Tissue
from vop.grid import RectilinearGrid
from vop.handoff import export
from vop.metadata import Conventions, Metadata, Reference
from vop.plugins import open_fields
from vop.regions import Region, Regions, global_matrices_by_region, load_regions
from vop.vopset import VopSet

SHAPE = (6, 5, 4)


def _grid() -> RectilinearGrid:
    x, y, z = (np.cumsum(np.r_[0.0, np.linspace(0.003, 0.006, s)]) for s in reversed(SHAPE))
    return RectilinearGrid(x, y, z)


def _tissue() -> Tissue:
    label = np.ones(SHAPE, np.uint8)
    label[3:] = 2
    label[0] = 0
    sigma, rho = np.array([0, 0.5, 0.8]), np.array([0, 1000.0, 1100.0])
    return Tissue(sigma[label], rho[label], label, {0: "air", 1: "muscle", 2: "brain"})


class _Uniform(FieldSource):
    """E of channel c is a constant vector c: everything about it can be written down."""

    vectors = np.array([[3.0, 0, 4j], [1j, 2.0, 0]])

    def __init__(self, centring: str = "cell") -> None:
        self.grid, self.tissue, self.centring = _grid(), _tissue(), centring
        self.conventions = Conventions("peak", "+", "forward power")
        self.channel_names, self.frequency_hz = ("a/b", "c"), 3e8
        self.channel_scale = np.ones(2)

    def read_raw_electric(self, channel: int, box) -> np.ndarray:  # type: ignore[no-untyped-def]
        shape = tuple(s.stop - s.start for s in box)
        return np.broadcast_to(self.vectors[channel][:, None, None, None], (3, *shape))


def _file(folder: Path, text: str) -> Path:
    path = folder / "regions.toml"
    path.write_text(text)
    return path


RULES = """
default = "trunk"
[[rule]]
region = "head"
tissues = ["brain"]
[[rule]]
region = "extremity"
box_m = [0.0, 0.004, -1, 1, -1, 1]
[[rule]]
region = "excluded"
reason = "a plate that the invented patient does not have"
mask = "plate.npy"
tissues = [1]
"""


def test_rules_by_tissue_box_and_mask_and_the_later_one_wins(tmp_path: Path) -> None:
    plate = np.zeros(SHAPE, bool)
    plate[:, 2, 2] = True
    np.save(tmp_path / "plate.npy", plate)
    grid, tissue = _grid(), _tissue()
    found = load_regions(_file(tmp_path, RULES), grid, tissue)
    wanted = np.where(tissue.label == 2, Region.HEAD, Region.TRUNK)
    wanted[:, :, grid.centres_m[2] <= 0.004] = Region.EXTREMITY
    wanted[~tissue.body] = 0
    np.testing.assert_array_equal(found.code, wanted)
    np.testing.assert_array_equal(found.excluded, plate & (tissue.label == 1))
    assert found.counts() == {"head": 45, "trunk": 30, "extremity": 25, "excluded": 2}
    (text,) = found.warnings()
    assert "2 of 100" in text
    assert "a plate that" in text


@pytest.mark.parametrize(
    ("text", "why"),
    [
        ("x = 1", "only 'default'"),
        ('default = "leg"', "default 'leg'"),
        ("[[rule]]", "needs 'region'"),
        ('[[rule]]\nregion = "leg"\ntissues = [1]', "region 'leg'"),
        ('[[rule]]\nregion = "head"', "selects nothing"),
        ('[[rule]]\nregion = "head"\ntissue = [1]', "may have"),
        ('[[rule]]\nregion = "head"\ntissues = ["brian"]', "'brian' is not known; known: air, muscle, brain"),
        ('[[rule]]\nregion = "head"\ntissues = [7]', "no tissue voxel"),
        ('[[rule]]\nregion = "head"\nbox_m = [0, 1, 0, 1, 1, 0]', "ascending"),
        ('[[rule]]\nregion = "head"\nbox_m = [5, 6, 0, 1, 0, 1]', "no tissue voxel"),
        ('[[rule]]\nregion = "head"\nmask = "none.npy"', "not readable"),
        ('[[rule]]\nregion = "excluded"\ntissues = [1]', "state reason"),
        ('[[rule]]\nregion = "head"\ntissues = ["brain"]', "40 tissue voxels have no region.*'muscle'"),
        ("rule = 3", r"\[\[rule\]\]"),
        ("= 3", "not a TOML file"),
    ],
)
def test_rules_that_mean_nothing_are_refused_by_name(tmp_path: Path, text: str, why: str) -> None:
    with pytest.raises(InputError, match=why) as caught:
        load_regions(_file(tmp_path, text), _grid(), _tissue())
    assert "regions" in str(caught.value)


def test_excluding_without_a_reason_is_refused() -> None:
    code = np.ones((1, 1, 1), np.uint8)
    with pytest.raises(InputError, match="no reason"):
        Regions(code, np.ones((1, 1, 1), bool))
    with pytest.raises(InputError, match="codes should be"):
        Regions(9 * code, np.zeros((1, 1, 1), bool))


@pytest.mark.parametrize("centring", ["cell", "node", "edge"])
def test_a_constant_field_gives_the_closed_form_in_every_region(centring: str) -> None:
    # Closed form: P = ½ σ V conj(E_i)·E_j, SAR = P/(ρ V); each tissue is uniform.
    source = _Uniform(centring)
    tissue, volumes = source.tissue, source.grid.volumes_m3()
    code = np.where(tissue.label == 2, Region.HEAD, Region.TRUNK) * tissue.body
    excluded = np.zeros(SHAPE, bool)
    excluded[4] = True
    found = global_matrices_by_region(source, Regions(code, excluded, ("test",)))
    gram = source.vectors.conj() @ source.vectors.T
    np.testing.assert_allclose(found.matrices["head"], 0.5 * 0.8 / 1100 * gram, rtol=1e-6)
    np.testing.assert_allclose(found.matrices["trunk"], 0.5 * 0.5 / 1000 * gram, rtol=1e-6)
    power = 0.5 * float((tissue.conductivity_s_m.astype(float) * volumes).sum())
    np.testing.assert_allclose(found.matrices["absorbed power"], power * gram, rtol=1e-6)
    mass = float((tissue.density_kg_m3.astype(float) * volumes).sum())
    np.testing.assert_allclose(found.matrices["whole body"], power / mass * gram, rtol=1e-6)
    assert found.units["whole body"] == "W/kg per |w|^2"
    assert found.record["mass_kg"]["head"] == pytest.approx(1100 * volumes[tissue.label == 2].sum())
    assert "extremity" not in found.matrices


def test_absorbed_power_agrees_with_the_one_that_comes_with_local_matrices(tmp_path: Path) -> None:
    # Two codes, two orders of summation: tables of tiles there, plain sums by region here.
    write_channel_hdf5(tmp_path)
    source = open_fields(tmp_path)
    found = global_matrices_by_region(source).matrices["absorbed power"]
    wanted = absorbed_power(source)
    np.testing.assert_allclose(found, wanted, atol=1e-10 * np.abs(wanted).max())


def test_regions_and_the_exposed_part_add_up_to_the_whole(tmp_path: Path) -> None:
    write_channel_hdf5(tmp_path, shape=(40, 9, 8))  # two tiles
    source = open_fields(tmp_path)
    body = source.tissue.body
    code = np.full(body.shape, Region.TRUNK)
    code[:10], code[30:] = Region.HEAD, Region.EXTREMITY
    exposed = np.zeros(body.shape, bool)
    exposed[5:25] = True
    regions = Regions(code * body, np.zeros(body.shape, bool))
    found = global_matrices_by_region(source, regions, exposed=exposed, patient_mass_kg=50.0)
    masses = found.record["mass_kg"]
    parts = sum(found.matrices[r] * masses[r] for r in ("head", "trunk", "extremity"))
    np.testing.assert_allclose(parts, found.matrices["absorbed power"], rtol=1e-9)
    assert masses["head"] + masses["trunk"] + masses["extremity"] == pytest.approx(
        found.record["model_mass_kg"]
    )
    assert masses["whole body"] == 50.0
    np.testing.assert_allclose(50 * found.matrices["whole body"], parts, rtol=1e-9)
    # Only what is exposed, by a second run in which all else does not conduct.
    inside = np.where(exposed, source.tissue.conductivity_s_m, 0)
    source.tissue = Tissue(inside, source.tissue.density_kg_m3, source.tissue.label)
    only = global_matrices_by_region(source).matrices["absorbed power"]
    np.testing.assert_allclose(found.matrices["partial body"] * masses["partial body"], only, rtol=1e-9)
    assert found.record["exposed_over_patient_mass"] == pytest.approx(masses["partial body"] / 50)


def test_power_of_each_channel_is_a_matrix_with_a_unit() -> None:
    found = global_matrices_by_region(_Uniform())
    w = np.array([2.0, 3j])
    for name, watts in (("forward power a_b", 4.0), ("forward power c", 9.0)):
        assert np.vdot(w, found.matrices[name] @ w).real == pytest.approx(watts)
        assert found.units[name] == "W per |w|^2"


def test_a_model_carries_the_matrices_of_its_regions(tmp_path: Path) -> None:
    write_channel_hdf5(tmp_path / "export")
    source = open_fields(tmp_path / "export")
    body = source.tissue.body
    regions = Regions.everywhere(source.tissue, Region.HEAD)
    exposed = body & (np.arange(body.shape[0]) < 5)[:, None, None]
    model = build_sar_model(
        source, None, regions=regions, exposed=exposed, patient_mass_kg=60.0, path=tmp_path / "model.h5"
    )
    wanted = global_matrices_by_region(source, regions, exposed=exposed, patient_mass_kg=60.0)
    assert set(model.global_matrices) == set(wanted.matrices)
    for name, matrix in wanted.matrices.items():
        atol = 1e-9 * np.abs(matrix).max()
        np.testing.assert_allclose(model.global_matrices[name], matrix, atol=atol)
        assert model.global_units[name] == wanted.units[name]
    assert model.metadata.details["global_matrices"]["patient_mass_kg"] == 60.0
    # Without regions the whole body still comes, from what was summed anyway.
    plain = build_sar_model(source, None).global_matrices
    model_mass = wanted.record["model_mass_kg"]
    np.testing.assert_allclose(plain["whole body"] * model_mass, plain["absorbed power"], rtol=1e-12)


@pytest.mark.parametrize(("phasor", "gain"), [("peak", 1.0), ("rms", 2.0)])
def test_voltages_stay_peak_or_rms_as_the_export_has_them(phasor: str, gain: float) -> None:
    # E per rms volt, both rms, is √2 E per rms volt as peak field: SAR per rms volt squared doubles.
    source = _Uniform()
    source.conventions = Conventions(phasor, "+", "port voltage")
    model = build_sar_model(source, None)
    assert model.metadata.reference.phasor == phasor
    gram = source.vectors.conj() @ source.vectors.T
    at = int(np.argmax(source.tissue.label.ravel()[model.cubes.voxel] == 2))  # type: ignore[union-attr]
    np.testing.assert_allclose(model.matrices(at), gain * 0.5 * 0.8 / 1100 * gram, rtol=1e-5)


def test_global_matrices_travel_into_a_mat_file_with_name_and_unit(tmp_path: Path) -> None:
    # Names of variables end after 31 characters: two that agree so far must not become one.
    long = "forward power of a channel with a long name, number"
    matrices = {f"{long} {c}": (c + 1) * np.eye(2) + 0j for c in range(2)} | {
        "whole body": 9 * np.eye(2) + 0j
    }
    vop_set = VopSet(
        packed=np.array([[1, 1, 0, 0]], np.float32),
        overestimation=0.1,
        worst_case=0.5,
        overestimation_matrix=0.5 * np.eye(2),
        core_index=np.zeros(1, np.int64),
        method="by hand",
        metadata=Metadata(Reference("port voltage", phasor="rms"), ("1", "2")),
        global_matrices=matrices,
        global_units=dict.fromkeys(matrices, "W/kg per |w|^2"),
    )
    export(vop_set, tmp_path / "set.mat", "mat5")
    found = scipy.io.loadmat(tmp_path / "set.mat")
    lines = str(found["global_units"][0]).split("\n")
    assert len(lines) == 3
    for line in lines:
        variable, name, unit = re.fullmatch(r"(\w+): (.*), (W/kg.*)", line).groups()  # type: ignore[union-attr]
        np.testing.assert_array_equal(found[variable], matrices[name])
        assert unit == "W/kg per |w|^2"
    assert str(found["unit"][0]) == "W/kg per V^2; w in V rms"


def test_a_patient_lighter_than_the_model_and_a_foreign_exposed_part_are_refused() -> None:
    source = _Uniform()
    with pytest.raises(InputError, match="patient mass"):
        global_matrices_by_region(source, patient_mass_kg=1e-6)
    with pytest.raises(InputError, match="exposed part"):
        global_matrices_by_region(source, exposed=np.zeros(SHAPE, bool))
    with pytest.raises(InputError, match="differ in shape"):
        global_matrices_by_region(source, Regions(np.ones((2, 2, 2), np.uint8), np.zeros((2, 2, 2), bool)))
