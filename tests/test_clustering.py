"""Clustering: both inequalities against numpy, closed forms, a semidefinite solver, and the plain method."""

from __future__ import annotations

import importlib.util
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numba
import numpy as np
import pytest
from conftest import random_matrices
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from proof_cases import SemidefiniteProgram, exact_combination, exactly_semidefinite, smooth_model

import vop
from vop.compression import checkpoint, clustering
from vop.errors import InputError
from vop.hermitian import pack

PLAIN = Path(__file__).parents[1] / "benchmarks" / "plain_clustering.py"


def plain_method():
    """The yardstick of the benchmarks: the published method in batched numpy.linalg."""
    spec = importlib.util.spec_from_file_location("plain_clustering", PLAIN)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module.cluster_plainly


def rich_model(seed: int, n: int, count: int) -> vop.SarModel:
    """An invented model, smooth along a line but with many degrees of freedom, and uneven in size."""
    smooth = smooth_model(seed, n, count, harmonics=8).matrices()
    size = 10.0 ** np.random.default_rng(seed).uniform(-1, 0, size=(count, 1, 1))
    return vop.SarModel.from_matrices(smooth * size)


def assert_both_inequalities(vop_set: vop.VopSet, matrices: np.ndarray) -> None:
    """Eichfelder & Gebhardt, Magn Reson Med 2011;66:1468: Q ⪯ A for one A; A ⪯ core + εS.

    By eigenvalues of numpy (LAPACK), whose own rounding is the only slack.
    """
    vops, slack = vop_set.matrices, 1e-13 * vop_set.worst_case
    covered = np.zeros(len(matrices), dtype=bool)
    for a in vops:
        open_ = np.flatnonzero(~covered)
        covered[open_] = np.linalg.eigvalsh(a - matrices[open_])[:, 0] >= -slack
    assert covered.all()
    above = matrices[vop_set.core_index] + vop_set.overestimation * vop_set.overestimation_matrix - vops
    assert np.linalg.eigvalsh(above)[:, 0].min() >= -slack


@pytest.mark.parametrize("n", [1, 2, 3, 5, 8, 13])
@pytest.mark.parametrize("overestimation", [0.3, 0.05, 0.01])
def test_sets_hold_both_inequalities_for_the_matrices_before_they_were_rounded_to_float32(
    n: int, overestimation: float
) -> None:
    matrices = random_matrices(np.random.default_rng(n), 300, n, rank=min(n, 3))
    vop_set = vop.compress(vop.SarModel.from_matrices(matrices), overestimation)
    assert_both_inequalities(vop_set, matrices)
    assert vop_set.overestimation == overestimation
    assert len(np.unique(vop_set.core_index)) == len(vop_set)


@pytest.mark.parametrize("condition", [1.0, 10.0, 300.0])
def test_sets_hold_both_inequalities_for_an_overestimation_matrix_that_is_not_the_identity(
    condition: float,
) -> None:
    rng = np.random.default_rng(3)
    n = 5
    matrices = random_matrices(rng, 250, n)
    u = np.linalg.qr(rng.normal(size=(n, n)) + 1j * rng.normal(size=(n, n)))[0]
    s = 2.0 * (u * np.geomspace(1 / condition, 1, n)) @ u.conj().T
    vop_set = vop.compress(vop.SarModel.from_matrices(matrices), 0.2, overestimation_matrix=s)
    np.testing.assert_allclose(vop_set.overestimation_matrix, s, rtol=0, atol=1e-15)
    assert_both_inequalities(vop_set, matrices)
    # The same problem in coordinates where S is the identity, W/kg per |w'|², w = S^{-1/2} w'.
    root = np.linalg.inv(np.linalg.cholesky(s))
    moved = vop.SarModel.from_matrices(root @ matrices @ root.conj().T)
    again = vop.compress(moved, bound_w_kg=0.2)
    assert abs(len(again) - len(vop_set)) <= 0.02 * len(vop_set)


def test_a_multiple_of_the_identity_as_overestimation_matrix_is_a_bound_in_watts_per_kilogram() -> None:
    model = rich_model(1, 4, 200)
    plain = vop.compress(model, 0.1)
    worst = plain.worst_case
    np.testing.assert_array_equal(
        plain.packed, vop.compress(model, 0.1, overestimation_matrix=worst * np.eye(4)).packed
    )
    by_bound = vop.compress(model, bound_w_kg=0.1 * worst)
    assert by_bound.overestimation == pytest.approx(0.1, rel=1e-15)
    assert len(by_bound) == len(plain)


@pytest.mark.parametrize(("n", "overestimation"), [(3, 0.1), (8, 0.1), (8, 0.02), (16, 0.1)])
def test_cores_and_growth_are_those_of_the_published_method_written_plainly(
    n: int, overestimation: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    # Reference: benchmarks/plain_clustering.py, every eigenvalue by numpy.linalg; published patience 1.
    model = rich_model(n, n, 400)
    for patience in (1, clustering._PATIENCE):
        monkeypatch.setattr(clustering, "_PATIENCE", patience)
        vop_set = vop.compress(model, overestimation)
        hair = vop_set.metadata.details["compression"]["hair"]
        bound = (overestimation - hair) * vop_set.worst_case
        cores, delivered = plain_method()(model.matrices(), bound, patience)
        np.testing.assert_array_equal(vop_set.core_index, cores)
        assert np.abs(vop_set.matrices - delivered).max() < 1.5 * hair * vop_set.worst_case


def test_scaled_copies_of_one_matrix_need_one_vop() -> None:
    # Closed form: c·Q ⪯ Q for c ≤ 1.
    q = random_matrices(np.random.default_rng(0), 1, 6)[0]
    copies = np.linspace(1e-6, 1, 500)[:, None, None] * q
    vop_set = vop.compress(vop.SarModel.from_matrices(copies), 0.01)
    assert len(vop_set) == 1
    assert vop_set.core_index[0] == 499


def test_orthogonal_matrices_of_rank_one_need_a_vop_each_up_to_full_overestimation() -> None:
    # Closed form: λmax(e_j e_jᴴ − e_i e_iᴴ) = 1, above every ε < 1.
    vop_set = vop.compress(vop.SarModel.from_matrices(np.array([np.diag(d) for d in np.eye(7)])), 0.99)
    assert sorted(vop_set.core_index) == list(range(7))


@pytest.mark.parametrize("angle", [0.05, 0.2])
def test_two_matrices_of_rank_one_share_a_vop_exactly_if_the_sine_of_their_angle_is_within_the_bound(
    angle: float,
) -> None:
    # Closed form: λmax(vvᴴ − uuᴴ) = sin θ for unit vectors at angle θ.
    u, v = np.array([1, 0, 0]), np.array([np.cos(angle), 0, 1j * np.sin(angle)])
    model = vop.SarModel.from_matrices(np.array([np.outer(x, x.conj()) for x in (u, v)]))
    assert len(vop.compress(model, np.sin(angle) + 1e-4)) == 1
    assert len(vop.compress(model, np.sin(angle) - 1e-4)) == 2


def test_commuting_matrices_cluster_like_vectors() -> None:
    # For diagonal matrices positive parts are elementwise: the published method on vectors, exactly.
    diagonals = (np.random.default_rng(5).random((150, 6)) ** 3).astype(np.float32)
    model = vop.SarModel.from_matrices(np.array([np.diag(d) for d in diagonals]))
    vop_set = vop.compress(model, 0.2)
    hair = vop_set.metadata.details["compression"]["hair"] * vop_set.worst_case
    bound = Fraction(0.2 * vop_set.worst_case - hair)
    vectors = [[Fraction(float(v)) for v in d] for d in diagonals]
    left, cores, delivered = list(range(150)), [], []
    while left:
        first = max(left, key=lambda r: max(vectors[r]))
        core, z, taken, refusals = vectors[first], [Fraction(0)] * 6, set(), 0
        for r in sorted(left, key=lambda r: -min(b - q for b, q in zip(core, vectors[r], strict=True))):
            grown = [max(a, q - b) for a, q, b in zip(z, vectors[r], core, strict=True)]
            if max(grown) <= bound:
                refusals = 0 if grown != z else refusals
                z = grown
                taken.add(r)
            elif (refusals := refusals + 1) == clustering._PATIENCE:
                break
        cores.append(first)
        delivered.append([float(b + a) for b, a in zip(core, z, strict=True)])
        left = [r for r in left if r not in taken]
    assert len(cores) > 10
    np.testing.assert_array_equal(vop_set.core_index, cores)
    np.testing.assert_allclose(vop_set.matrices.diagonal(axis1=1, axis2=2), delivered, atol=hair)


def test_every_matrix_is_a_combination_of_vops_away_by_a_semidefinite_solver_and_not_without_one_vop() -> (
    None
):
    # Reference: clarabel through cvxpy. Without a VOP the same program must find its core uncovered.
    matrices = random_matrices(np.random.default_rng(8), 60, 4)
    vop_set = vop.compress(vop.SarModel.from_matrices(matrices), 0.1)
    program = SemidefiniteProgram(vop_set.matrices)
    assert min(program.best_margin(q) for q in matrices[::3]) >= -1e-6 * vop_set.worst_case
    largest = int(np.argmax(np.linalg.eigvalsh(vop_set.matrices)[:, -1]))
    without = SemidefiniteProgram(np.delete(vop_set.matrices, largest, axis=0))
    assert without.best_margin(matrices[vop_set.core_index[largest]]) < -1e-3 * vop_set.worst_case


def test_both_inequalities_hold_in_exact_rational_arithmetic() -> None:
    # Reference: elimination in fractions (tests/proof_cases.py), no rounding anywhere.
    matrices = random_matrices(np.random.default_rng(4), 12, 3)
    vop_set = vop.compress(vop.SarModel.from_matrices(matrices), 0.1)
    one, epsilon = Fraction(1), Fraction(vop_set.overestimation)
    for a, core in zip(vop_set.matrices, matrices[vop_set.core_index], strict=True):
        terms = [(one, core), (epsilon, vop_set.overestimation_matrix), (-one, a)]
        assert exactly_semidefinite(*exact_combination(terms))
    for q in matrices:
        assert any(exactly_semidefinite(*exact_combination([(one, a), (-one, q)])) for a in vop_set.matrices)


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(
    seed=st.integers(0, 2**32 - 1),
    n=st.integers(1, 6),
    count=st.integers(1, 40),
    rank=st.integers(1, 6),
    overestimation=st.floats(1e-3, 0.9),
    scale=st.sampled_from([1e-12, 1.0, 1e9]),
)
def test_both_inequalities_hold_whatever_the_set(
    seed: int, n: int, count: int, rank: int, overestimation: float, scale: float
) -> None:
    rng = np.random.default_rng(seed)
    matrices = scale * random_matrices(rng, count, n, rank)
    # Duplicates and zeros among them.
    matrices[rng.integers(count)] = matrices[0]
    if count > 2:
        matrices[-1] = 0.0
    vop_set = vop.compress(vop.SarModel.from_matrices(matrices), overestimation)
    assert_both_inequalities(vop_set, matrices)
    assert len(vop_set) <= count


@pytest.mark.parametrize(
    "matrices",
    [
        np.ones((1, 1, 1)),
        np.arange(1.0, 50.0)[:, None, None],
        np.repeat(random_matrices(np.random.default_rng(1), 1, 4), 40, axis=0),
        np.concatenate([random_matrices(np.random.default_rng(1), 1, 4), np.zeros((30, 4, 4))]),
        np.repeat(np.eye(5)[None], 3, axis=0),
    ],
    ids=["one matrix of one channel", "one channel", "identical", "zeros among", "identities"],
)
def test_degenerate_input_gives_one_vop(matrices: np.ndarray) -> None:
    vop_set = vop.compress(vop.SarModel.from_matrices(matrices), 0.05)
    assert len(vop_set) == 1
    assert_both_inequalities(vop_set, matrices)


def test_sets_are_the_same_to_the_bit_for_any_number_of_threads_and_of_clusters_at_once(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    model = rich_model(2, 6, 900)
    before = numba.get_num_threads()
    digests = set()
    try:
        for threads in {1, before}:
            for at_once in (1, 3, 64, 500):
                numba.set_num_threads(threads)
                monkeypatch.setattr(clustering, "_MOST_AT_ONCE", at_once)
                digests.add(vop.compress(model, 0.05).digest())
    finally:
        numba.set_num_threads(before)
    assert len(digests) == 1


def test_a_memory_mapped_model_gives_the_set_of_the_same_model_in_memory(tmp_path: Path) -> None:
    model = rich_model(2, 4, 200)
    model.save(tmp_path / "model.h5")
    mapped = vop.SarModel.load(tmp_path / "model.h5")
    assert vop.compress(mapped, 0.05).digest() == vop.compress(model, 0.05).digest()


@pytest.mark.parametrize("exponent", [-40, 60])
def test_a_change_of_unit_by_a_power_of_two_changes_nothing_but_the_unit(exponent: int) -> None:
    model = rich_model(6, 4, 200)
    factor = np.float32(2.0**exponent)
    here = vop.compress(model, 0.05)
    there = vop.compress(vop.SarModel(model.packed * factor, model.metadata), 0.05)
    np.testing.assert_array_equal(there.packed, here.packed * factor)
    assert there.worst_case == here.worst_case * factor


@pytest.mark.parametrize(
    ("value", "words"),
    [
        (0.0, "overestimation 0 "),
        (-0.05, "overestimation -0.05 "),
        (float("nan"), "overestimation nan "),
        (float("inf"), "overestimation inf "),
        (1.0, "overestimation 1 .* say 0.01"),
        (5, "for 5 % say 0.05"),
        (1e9, "overestimation 1e\\+09 "),
        ("much", "overestimation 'much' is not a number"),
        (1e-9, "too small for float32 files of 4 channels"),
    ],
)
def test_an_overestimation_that_cannot_be_meant_is_refused_with_its_value(value, words: str) -> None:
    with pytest.raises(InputError, match=words):
        vop.compress(rich_model(1, 4, 10), value)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"method": "k-means"}, "method 'k-means' is not known"),
        ({"bound_w_kg": -1.0}, "bound_w_kg -1 "),
        ({"bound_w_kg": float("nan")}, "bound_w_kg nan "),
        ({"bound_w_kg": 1e9}, "worst case"),
        ({"bound_w_kg": 0.1, "overestimation_matrix": np.eye(4)}, "leave overestimation_matrix out"),
        ({"overestimation_matrix": np.eye(3)}, "should be \\(4, 4\\)"),
        ({"overestimation_matrix": np.diag([1, 1, 1, 0])}, "not positive definite"),
        ({"overestimation_matrix": np.diag([1, 1, 1, np.nan])}, "NaN"),
        ({"overestimation_matrix": np.triu(np.ones((4, 4)))}, "not Hermitian"),
        ({"overestimation_matrix": np.diag([1, 1, 1, 1e-9])}, "condition 1e\\+09"),
        ({"max_vops": 0}, "max_vops 0 "),
        ({"max_vops": 2.5}, "max_vops 2.5 "),
    ],
)
def test_options_out_of_range_are_refused_with_their_value(options: dict, words: str) -> None:
    with pytest.raises(InputError, match=words):
        vop.compress(rich_model(1, 4, 10), 0.05, **options)


def test_models_that_hold_no_sar_or_nan_are_refused() -> None:
    model = rich_model(1, 4, 10)
    packed = model.packed.copy()
    packed[7, 3] = np.nan
    with pytest.raises(InputError, match="matrix 7 of the model holds NaN"):
        vop.compress(replace(model, packed=packed), 0.05)
    with pytest.raises(InputError, match="no SAR to bound"):
        vop.compress(replace(model, packed=np.zeros_like(packed)), 0.05)
    with pytest.raises(InputError, match="check the units"):
        vop.compress(replace(model, packed=model.packed * np.float32(1e-30)), 0.05)


def test_worst_case_is_attained_from_below_and_tight() -> None:
    # Closed form: vvᴴ has the one eigenvalue ‖v‖²; integers make it exact.
    v = np.array([1, 2j, 2, 4 - 4j])
    whole = pack(np.array([np.outer(v, v.conj()), 3 * np.eye(4)]), np.float32)
    exact = replace(rich_model(1, 4, 2), packed=whole)
    assert 0 <= 41 - vop.compress(exact, 0.05).worst_case < 1e-13
    # And by exact arithmetic: λmax·1 − Q is not semidefinite below, worst·(1 + 1e-13)·1 − Q is.
    model = rich_model(4, 5, 60)
    vop_set = vop.compress(model, 0.05)
    row = vop_set.metadata.details["compression"]["worst_case_row"]
    q, one = model.matrices(row), np.eye(5, dtype=complex)
    below = Fraction(vop_set.worst_case) * (1 - Fraction(1, 10**13))
    above = Fraction(vop_set.worst_case) * (1 + Fraction(1, 10**13))
    assert not exactly_semidefinite(*exact_combination([(below, one), (Fraction(-1), q)]))
    assert exactly_semidefinite(*exact_combination([(above, one), (Fraction(-1), q)]))
    assert np.linalg.eigvalsh(model.matrices()).max() <= vop_set.worst_case * (1 + 1e-13)


def test_max_vops_raises_the_bound_until_that_many_suffice_and_says_so() -> None:
    model = rich_model(3, 4, 300)
    full = vop.compress(model, 0.02)
    few = vop.compress(model, 0.02, max_vops=len(full) // 3)
    assert len(few) <= len(full) // 3
    assert few.overestimation > 0.02
    assert_both_inequalities(few, model.matrices())
    record = few.metadata.details["compression"]
    assert record["overestimation_asked"] == 0.02
    assert record["overestimation"] == few.overestimation
    # Tight: a bound 3 % lower needs more.
    assert len(vop.compress(model, few.overestimation * 0.97)) > len(full) // 3
    same = vop.compress(model, 0.02, max_vops=len(full))
    np.testing.assert_array_equal(same.packed, full.packed)


class _Killed(Exception):
    pass


def _killed_after(rounds: int):
    calls = iter(range(rounds))

    def progress(label: str, done: int, total: int) -> None:
        if next(calls, None) is None:
            raise _Killed

    return progress


def test_a_killed_run_goes_on_from_its_checkpoint_to_the_same_set(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(checkpoint, "SECONDS", 0.0)
    model, path = rich_model(2, 6, 900), tmp_path / "state.h5"
    whole = vop.compress(model, 0.05)
    for rounds in (1, 4):
        with pytest.raises(_Killed):
            vop.compress(model, 0.05, progress=_killed_after(rounds), checkpoint=path)
    # What another ε left is of no use, and no harm.
    assert vop.compress(model, 0.1).digest() == vop.compress(model, 0.1, checkpoint=None).digest()
    first = []
    again = vop.compress(model, 0.05, progress=lambda _, done, total: first.append(done), checkpoint=path)
    assert again.digest() == whole.digest()
    assert first[0] > 100
    assert not path.exists()


def test_a_checkpoint_of_other_inputs_is_not_used_and_a_foreign_file_is_not_overwritten(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(checkpoint, "SECONDS", 0.0)
    model, path = rich_model(2, 6, 300), tmp_path / "state.h5"
    with pytest.raises(_Killed):
        vop.compress(model, 0.05, progress=_killed_after(3), checkpoint=path)
    other = rich_model(3, 6, 300)
    assert vop.compress(other, 0.05, checkpoint=path).digest() == vop.compress(other, 0.05).digest()
    path.write_text("somebody's notes")
    with pytest.raises(InputError, match=r"state\.h5"):
        vop.compress(model, 0.05, checkpoint=path)
    assert path.read_text() == "somebody's notes"
    other.save(tmp_path / "model.h5")
    with pytest.raises(InputError, match="no compression checkpoint"):
        vop.compress(model, 0.05, checkpoint=tmp_path / "model.h5")


def test_a_set_carries_the_record_of_how_it_was_made_and_the_global_matrices() -> None:
    model = rich_model(1, 4, 50)
    model = replace(
        model, global_matrices={"absorbed power": np.eye(4)}, global_units={"absorbed power": "W per W"}
    )
    vop_set = vop.compress(model, 0.05)
    record = vop_set.metadata.details["compression"]
    assert record["method"] == vop_set.method == "clustering"
    assert (record["n_matrices"], record["n_vops"]) == (50, len(vop_set))
    assert record["model_digest"] == model.digest()
    assert 0 < record["hair"] < 1e-5
    np.testing.assert_array_equal(vop_set.global_matrices["absorbed power"], np.eye(4))
    assert vop_set.global_units == {"absorbed power": "W per W"}
