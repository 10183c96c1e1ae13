"""The demo: an export any reader of its layout can read, that says what it is, and is physically sound."""

from __future__ import annotations

import tomllib
from dataclasses import replace
from pathlib import Path

import h5py
import numba
import numpy as np
import pytest
from scipy.constants import mu_0

import vop
from vop.demo import ArrayPower, Ball, DemoArray, Elements, Solution, compute_demo, write_demo
from vop.demo.layered_sphere import free_space_field
from vop.demo.write import DemoFields
from vop.errors import InputError, OutputError
from vop.job import load_job

#: A quick array. Voxels of 4 mm cannot show a skin of 2.5 mm: some loss keeps their sum below 1 W.
SMALL = DemoArray(n_channels=3, element_m=0.012, loss_ohm=1.0)
STEP_M = 0.004


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    target = tmp_path_factory.mktemp("demo") / "try"
    write_demo(target, array=SMALL, step_m=STEP_M)
    return target


@pytest.fixture(scope="module")
def fields() -> DemoFields:
    return compute_demo(Ball(), SMALL, STEP_M)


def test_everything_says_that_it_is_invented(folder: Path) -> None:
    assert "INVENTED" in (folder / "README.txt").read_text()
    assert "INVENTED" in (folder / "JOB.toml").read_text()
    assert "INVENTED" in (folder / "export" / "array.s3p").read_text()
    for file in (folder / "export").glob("*.h5"):
        with h5py.File(file) as handle:
            assert "INVENTED" in handle.attrs["note"]


def test_the_export_states_its_conventions_and_the_job_reads(folder: Path) -> None:
    job = load_job(folder / "JOB.toml")
    source = vop.open_fields(job.input_path, job.reader)
    assert dict(source.conventions.stated_by) == dict.fromkeys(("phasor", "time_sign", "reference"), "file")
    assert source.n_channels == 3
    assert source.scattering is not None
    assert not source.scattering.any()
    assert job.settle_domain(source.frequency_hz, source.b0_direction).expiry == "not for use on people"


def test_what_is_read_is_what_was_computed(folder: Path, fields: DemoFields) -> None:
    source = vop.open_fields(folder / "export")
    body = source.tissue.body
    everything = tuple(slice(0, n) for n in body.shape)
    assert np.array_equal(body, fields.label > 0)
    for read, wanted in ((source.electric, fields.electric), (source.magnetic, fields.magnetic)):
        for channel in range(3):
            assert np.array_equal(read(channel, everything)[:, body], wanted[channel])


def test_the_fields_obey_faraday_s_law_on_the_grid(fields: DemoFields) -> None:
    # Source: ∇×E = −jωμ₀H for e^{+jωt}, by central differences deep in the core, where 4 mm are fine.
    whole = np.zeros((2, 3, 3, *fields.label.shape), complex)
    whole[0][..., fields.label > 0], whole[1][..., fields.label > 0] = fields.electric, fields.magnetic
    middle = fields.label.shape[0] // 2
    core = slice(middle - 4, middle + 4)
    e, h = whole[..., core, core, core]
    dz, dy, dx = (np.gradient(e, STEP_M, axis=a, edge_order=2) for a in (2, 3, 4))
    curl = np.stack([dy[:, 2] - dz[:, 1], dz[:, 0] - dx[:, 2], dx[:, 1] - dy[:, 0]], 1)
    wanted = -1j * 2 * np.pi * SMALL.frequency_hz * mu_0 * h
    inner = (..., *[slice(1, -1)] * 3)
    assert np.abs(curl - wanted)[inner].max() < 0.03 * np.abs(wanted).max()


def test_absorbed_power_is_what_the_solver_says_but_for_the_staircase(
    folder: Path, fields: DemoFields
) -> None:
    # Conservation: the solver's parts add up to the forward watt. Voxels of 4 mm against a skin of 2.5 mm
    # leave some per cent (measured: 0.025 W).
    power = fields.power
    assert np.allclose(power.absorbed_w + power.radiated_w + power.lost_w, np.eye(3), atol=1e-12)
    for part in (power.absorbed_w, power.radiated_w, power.lost_w):
        assert np.linalg.eigvalsh(part)[0] > 0
    model = vop.build_sar_model(vop.open_fields(folder / "export"))
    summed = model.global_matrices["absorbed power"]
    assert np.abs(summed - fields.voxel_absorbed_w).max() < 1e-5
    assert np.abs(np.linalg.eigvalsh(summed - power.absorbed_w)).max() < 0.04


def test_voxels_agree_with_the_solver_where_layers_are_thick() -> None:
    # As above without thin layers to blame (measured: 0.0098 W, and 0.0027 W at 2 mm).
    found = compute_demo(Ball(shells=(("skin", 0.02),), core="muscle"), SMALL, STEP_M)
    assert np.abs(np.linalg.eigvalsh(found.voxel_absorbed_w - found.power.absorbed_w)).max() < 0.015


def test_forward_power_is_what_leaves_the_elements() -> None:
    # Energy conservation without the solver's modes: −½ Re ∫ E·J* over the elements of the decoupled array,
    # the field of a short element at itself being −ωμ₀k₀/6π per moment (Hertzian dipole, any handbook).
    array = replace(SMALL, loss_ohm=0.0)
    elements, owner = array.elements()
    solution = Solution.around(Ball().sphere(array.frequency_hz), elements, 1e-9)
    drive = ArrayPower.of(solution, elements, owner).decoupled_currents()
    sphere, everyone = solution.sphere, np.arange(len(owner))
    field, _ = solution.field(elements, owner, 3, elements.position_m, returned=True)
    with np.errstate(divide="ignore", invalid="ignore"):
        direct, _ = free_space_field(sphere.k0, sphere.omega, elements, elements.position_m)
    own = -sphere.omega * mu_0 * sphere.k0 / (6 * np.pi)
    direct[everyone, :, everyone] = own * elements.moment
    np.add.at(field, owner, direct)
    by_element = -0.5 * np.einsum("ia,dai->id", elements.moment.conj(), field)
    given = np.zeros((3, 3), complex)
    np.add.at(given, owner, by_element)
    given = drive.conj().T @ (0.5 * (given + given.conj().T)) @ drive
    assert np.allclose(given, np.eye(3), atol=1e-7)


def test_lost_power_is_half_the_resistance_times_peak_current_squared() -> None:
    # Source: P = ½ R |I|² for peak phasors, any handbook.
    elements, owner = SMALL.elements()
    solution = Solution.around(Ball().sphere(SMALL.frequency_hz), elements, 1e-4)
    current = np.array([1.0, 2.0j, -3.0])
    lost = ArrayPower.of(solution, elements, owner, 4.0).lost_w
    assert (current.conj() @ lost @ current).real == pytest.approx(0.5 * 4.0 * (1 + 4 + 9))


def test_no_charge_is_left_on_a_loop_and_strips_end_without_current() -> None:
    elements, owner = DemoArray(n_channels=2).elements()
    strip, loop = (Elements(elements.position_m[owner == c], elements.moment[owner == c]) for c in (0, 1))
    assert np.abs(loop.moment.sum(axis=0)).max() < 1e-15
    size = np.linalg.norm(strip.moment, axis=1)
    assert size[[0, -1]].max() < 0.05 * size.max()


def test_the_array_stays_where_it_is_when_the_body_changes(tmp_path: Path) -> None:
    ball = Ball("smaller ball, invented", 0.060, shift_m=(0.004, -0.003, 0.002))
    write_demo(tmp_path / "d", ball=ball, array=SMALL, step_m=STEP_M, magnetic=False)
    domain = tomllib.loads((tmp_path / "d" / "JOB.toml").read_text())["domain"]
    assert domain["bodies"] == ["smaller ball, invented"]
    assert domain["positions"] == ["shifted by (4, -3, 2) mm"]
    source = vop.open_fields(tmp_path / "d" / "export")
    assert [0.5 * (e[0] + e[-1]) for e in source.grid.edges_m] == pytest.approx([0.002, -0.003, 0.004])
    assert source.magnetic(0, (slice(0, 1),) * 3) is None
    # Fields in the array's frame: the elements seen from the ball's centre are those minus the shift.
    elements, owner = SMALL.elements()
    moved = Elements(elements.position_m - np.array(ball.shift_m), elements.moment)
    solution = Solution.around(ball.sphere(SMALL.frequency_hz), moved)
    drive = ArrayPower.of(solution, moved, owner, SMALL.loss_ohm).decoupled_currents()
    z, y, x = (int(i) for i in np.argwhere(source.tissue.body)[1234])
    place = np.array([[source.grid.centres_m[2 - a][i] for a, i in enumerate((x, y, z))]])
    e, _ = solution.field(moved, owner, 3, place - np.array(ball.shift_m))
    found = source.electric(1, (slice(z, z + 1), slice(y, y + 1), slice(x, x + 1)))[:, 0, 0, 0]
    assert np.allclose(found, drive[:, 1] @ e[..., 0], rtol=1e-5)


def test_sixteen_channels_are_as_easily_said() -> None:
    array = DemoArray(n_channels=16, kinds=("loop",), element_m=0.012, loss_ohm=2.0)
    found = compute_demo(Ball(), array, 0.006)
    assert found.electric.shape[0] == 16
    assert np.linalg.eigvalsh(found.voxel_absorbed_w)[-1] < 1


@pytest.mark.parametrize(
    ("ball", "array", "step_m", "words"),
    [
        (Ball(radius_m=0.079), SMALL, STEP_M, "comes within 2.6 mm"),
        (Ball(), SMALL, 0.03, "do not resolve"),
        (Ball(), DemoArray(element_m=0.012), 0.004, "too coarse for these layers"),
    ],
)
def test_a_demo_that_would_mislead_is_refused(
    ball: Ball, array: DemoArray, step_m: float, words: str
) -> None:
    with pytest.raises(InputError, match=words):
        compute_demo(ball, array, step_m)


def test_nonsense_is_refused() -> None:
    with pytest.raises(InputError, match="at least 2"):
        DemoArray(n_channels=1)
    with pytest.raises(InputError, match="strip and loop"):
        DemoArray(kinds=("patch",))
    with pytest.raises(InputError, match="no values for"):
        Ball(core="cheese")
    with pytest.raises(InputError, match="more than the radius"):
        Ball(radius_m=0.02)


def test_an_occupied_folder_is_refused(tmp_path: Path) -> None:
    (tmp_path / "mine.txt").write_text("precious")
    with pytest.raises(OutputError, match="not an empty folder"):
        write_demo(tmp_path, array=SMALL, step_m=0.01)
    assert [f.name for f in tmp_path.iterdir()] == ["mine.txt"]


LOSSY = replace(SMALL, loss_ohm=5.0)


def test_force_leaves_nothing_of_an_earlier_demo_with_more_channels(tmp_path: Path) -> None:
    for channels in (4, 2):
        write_demo(tmp_path, array=replace(LOSSY, n_channels=channels), step_m=0.012, force=True)
    names = sorted(f.name for f in (tmp_path / "export").iterdir())
    assert names == ["array.s2p", "channel_01.h5", "channel_02.h5", "tissue.h5"]


def test_force_never_touches_a_real_export(tmp_path: Path) -> None:
    (tmp_path / "export").mkdir()
    with h5py.File(tmp_path / "export" / "channel_05.h5", "w") as handle:
        handle["E/real"] = 1.0
    before = (tmp_path / "export" / "channel_05.h5").read_bytes()
    with pytest.raises(OutputError, match="is not of a demo"):
        write_demo(tmp_path, array=LOSSY, step_m=0.012, force=True)
    assert (tmp_path / "export" / "channel_05.h5").read_bytes() == before
    assert not (tmp_path / "JOB.toml").exists()


def test_the_same_array_gives_the_same_bytes_with_any_number_of_threads(tmp_path: Path) -> None:
    threads = numba.get_num_threads()
    for name, count in (("one", 1), ("two", threads)):
        numba.set_num_threads(count)
        try:
            write_demo(tmp_path / name, array=LOSSY, step_m=0.012)
        finally:
            numba.set_num_threads(threads)
    for file in sorted((tmp_path / "one").rglob("*")):
        if file.is_file():
            assert file.read_bytes() == (tmp_path / "two" / file.relative_to(tmp_path / "one")).read_bytes()
