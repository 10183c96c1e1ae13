"""Both statements of a proof, against a semidefinite solver, a linear programme and exact arithmetic."""

from __future__ import annotations

import ast
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import h5py
import numba
import numpy as np
import pytest
from conftest import random_matrices
from proof_cases import (
    SemidefiniteProgram,
    exact_combination,
    exactly_semidefinite,
    metadata,
    plain_clustering,
    set_of,
    smooth_model,
)
from scipy.optimize import linprog

import vop
from vop.errors import InputError, OutputError
from vop.hermitian import pack, unpack
from vop.proof import prove, recheck
from vop.proof.certificate import Certificate
from vop.proof.cover import ONE
from vop.storage import seal


@pytest.fixture(scope="module")
def pair() -> tuple[vop.VopSet, vop.SarModel]:
    """A set made by a plain compressor, and its model."""
    model = smooth_model(0, 4, 150)
    return plain_clustering(model, 0.05), model


def _float32(a: np.ndarray) -> np.ndarray:
    return unpack(pack(a, np.float32))


def _without_claims_on_overestimation(vop_set: vop.VopSet) -> vop.VopSet:
    """ε so large that only the first statement is at stake."""
    return replace(vop_set, overestimation=1e6)


@pytest.mark.parametrize("n", [2, 3, 4])
def test_dominance_by_combinations_agrees_with_a_semidefinite_solver_on_both_sides_of_the_boundary(
    n: int,
) -> None:
    # Reference: clarabel through cvxpy. Each target is moved so that the best margin any weights reach
    # is ±distance of the columns' size, and must be proved or refuted accordingly.
    rng = np.random.default_rng(n)
    counts = {True: 0, False: 0}
    for _ in range(8):
        vops = _float32(random_matrices(rng, 2 + int(rng.integers(6)), n, rank=n))
        program = SemidefiniteProgram(vops)
        targets = random_matrices(rng, 6, n, rank=2) * rng.uniform(0.3, 1, (6, 1, 1))
        best = np.array([program.best_margin(t) for t in targets])
        for distance in (1e-2, 1e-4, 2e-6):
            for side in (True, False):
                shift = best - (distance if side else -distance) * program.scale
                moved = targets + shift[:, None, None] * np.eye(n)
                model = vop.SarModel(pack(moved, np.float32), metadata(n))
                result = prove(_without_claims_on_overestimation(set_of(vops, model, 1.0)), model)
                assert result.underestimation.n_proved == (len(moved) if side else 0)
                counts[side] += len(moved)
                for item in result.underestimation.unproved:
                    assert item.shortfall > 0
                    _check_witness(item.covariance, moved[item.index], vops)
                    if item.excitation is not None:
                        x = np.outer(item.excitation, item.excitation.conj())
                        _check_witness(x, moved[item.index], vops)
    assert counts == {True: 144, False: 144}


def _check_witness(x: np.ndarray | None, target: np.ndarray, vops: np.ndarray) -> None:
    """tr(QX) > max tr(AX) for X ⪰ 0, evaluated with numpy."""
    assert x is not None
    assert np.linalg.eigvalsh(x)[0] > -1e-12
    assert np.trace(target @ x).real > np.trace(vops @ x, axis1=1, axis2=2).real.max()


def test_eight_channels_and_forty_vops_agree_with_a_semidefinite_solver() -> None:
    # Reference: clarabel. More VOPs than the convex problem starts with, so that columns must join.
    rng = np.random.default_rng(8)
    vops = _float32(random_matrices(rng, 40, 8, rank=2) + 0.02 * np.eye(8))
    program = SemidefiniteProgram(vops)
    targets = random_matrices(rng, 8, 8, rank=3) * 0.5
    best = np.array([program.best_margin(t) for t in targets])
    for distance, wanted in ((4e-6, 8), (-4e-6, 0)):
        moved = targets + (best - distance * program.scale)[:, None, None] * np.eye(8)
        model = vop.SarModel(pack(moved, np.float32), metadata(8))
        result = prove(_without_claims_on_overestimation(set_of(vops, model, 1.0)), model)
        assert result.underestimation.n_proved == wanted


def test_no_target_away_from_the_boundary_is_left_undecided() -> None:
    # Low ranks, scales from 1e-8 to 1e8 W/kg, and targets within 1e-6 of mixtures of the VOPs. Whatever
    # is not proved must come with a covariance that refutes it (numpy).
    rng = np.random.default_rng(11)
    refuted = 0
    for _ in range(40):
        n, k = int(rng.integers(1, 8)), int(rng.integers(1, 40))
        scale = 10.0 ** rng.uniform(-8, 8)
        vops = _float32(random_matrices(rng, k, n, rank=int(rng.integers(1, n + 1))) * scale)
        mixtures = np.einsum("tk,kij->tij", rng.dirichlet(np.full(k, 0.3), 20), vops)
        moved = 1 + rng.choice([-1, 1], 20) * 10.0 ** rng.uniform(-6, -1, 20)
        other = random_matrices(rng, 20, n, rank=2) * scale * rng.uniform(0.01, 1, (20, 1, 1))
        targets = np.concatenate([mixtures * moved[:, None, None], other])
        model = vop.SarModel(pack(targets, np.float32), metadata(n))
        result = prove(_without_claims_on_overestimation(set_of(vops, model, 1.0)), model)
        for item in result.underestimation.unproved[:32]:
            assert item.shortfall > 0
            _check_witness(item.covariance, model.matrices(item.index), vops)
            refuted += 1
    assert refuted > 100


def test_commuting_matrices_are_a_linear_programme() -> None:
    # Reference: scipy's linprog (HiGHS). Diagonal matrices dominate entry by entry.
    rng = np.random.default_rng(7)
    n, agreed = 5, {True: 0, False: 0}
    for _ in range(25):
        a = rng.uniform(0, 1, (7, n)).astype(np.float32).astype(float)
        q = rng.uniform(0, 0.8, (8, n))
        # Largest t with Σ c a_k − q ≥ t.
        wanted = []
        for row in q:
            solution = linprog(
                [*np.zeros(7), -1.0],
                A_ub=np.column_stack([-a.T, np.ones(n)]),
                b_ub=-row,
                A_eq=[[*np.ones(7), 0.0]],
                b_eq=[1.0],
                bounds=[*[(0, None)] * 7, (None, None)],
            )
            wanted.append(-solution.fun)
        keep = np.abs(wanted) > 1e-6
        matrices = q[keep][:, :, None] * np.eye(n)
        model = vop.SarModel(pack(matrices, np.float32), metadata(n))
        result = prove(
            _without_claims_on_overestimation(set_of(a[:, :, None] * np.eye(n), model, 1.0)), model
        )
        open_rows = {item.index for item in result.underestimation.unproved}
        for place, margin in enumerate(np.array(wanted)[keep]):
            assert (place not in open_rows) == (margin > 0)
            agreed[bool(margin > 0)] += 1
    assert min(agreed.values()) > 20


def test_weights_that_alone_suffice_are_found_although_no_single_vop_dominates() -> None:
    # Closed form: diag(1, 0) and diag(0, 1) dominate diag(q, 1 − q) only by the weights (q, 1 − q).
    h = 2.0**-10
    vops = np.array([np.diag([1.0 + h, h]), np.diag([h, 1.0 + h])])
    shares = np.linspace(0.01, 0.99, 50)
    model = vop.SarModel.from_matrices(np.array([np.diag([q, 1 - q]) for q in shares]) + 0j)
    result = prove(_without_claims_on_overestimation(set_of(vops, model, 1.0)), model)
    assert result.underestimation.holds
    assert result.underestimation.n_single == 0
    assert result.underestimation.most_terms == 2
    # λmin of Σ c A − Q is at most h, for the trace of the difference is 2h.
    assert 0 < result.underestimation.margin * np.diag([shares[-1], 0]).max() <= h * 1.001


def test_the_counter_example_of_a_dropped_core_is_caught() -> None:
    # ε = 0.05, cores diag(1, 0) and diag(0.90, 0.05), Q = diag(0.85, 0.10): the second core is covered
    # by the first within ε, yet without it Q is short by 0.05.
    q = np.array([np.diag([1.0, 0.0]), np.diag([0.90, 0.05]), np.diag([0.85, 0.10])])
    model = vop.SarModel.from_matrices(q + 0j)
    both = set_of(q[:2] + 0.051 * np.eye(2), model, 0.052)
    assert prove(both, model).holds
    dropped = prove(replace(both, packed=both.packed[:1], core_index=both.core_index[:1]), model)
    assert [item.index for item in dropped.underestimation.unproved] == [2]
    assert dropped.underestimation.unproved[0].shortfall == pytest.approx(0.049, rel=0.04)
    assert not dropped.holds


def test_a_set_of_a_plain_compressor_is_proved(pair: tuple[vop.VopSet, vop.SarModel]) -> None:
    vop_set, model = pair
    result = prove(vop_set, model)
    assert result.holds
    assert result.underestimation.n_targets == len(model)
    assert result.overestimation.n_targets == len(vop_set)
    assert result.underestimation.margin > 0
    assert "PROVED" in result.summary()
    assert "NOT" not in result.summary()


def test_margins_are_least_eigenvalues_of_the_certificates_combinations(
    pair: tuple[vop.VopSet, vop.SarModel], tmp_path: Path
) -> None:
    # Reference: numpy's eigenvalues of Σ c A − Q from the stored weights, and rational arithmetic.
    vop_set, model = pair
    result = prove(vop_set, model, certificate_path=tmp_path / "c.h5")
    found = Certificate.load(tmp_path / "c.h5", len(model), len(vop_set), 4)
    least = []
    for v, q in enumerate(model.matrices()):
        row = found.underestimation.rows(v, v + 1)
        weights = row.weight / ONE
        assert int(row.weight.sum()) == ONE
        terms = [(Fraction(float(c)), vop_set.matrices[k]) for c, k in zip(weights, row.index, strict=True)]
        least.append(np.linalg.eigvalsh(sum(float(c) * a for c, a in terms) - q)[0])
        if v % 25 == 0:
            margin = Fraction(result.underestimation.margin * vop_set.worst_case * (1 - 1e-12))
            assert exactly_semidefinite(*exact_combination([*terms, (Fraction(-1), q)], margin))
    proved = result.underestimation.margin * vop_set.worst_case
    assert int(np.argmin(least)) == result.underestimation.margin_index
    assert 0.97 * min(least) < proved < min(least)


def test_overestimation_beyond_the_bound_is_refuted(pair: tuple[vop.VopSet, vop.SarModel]) -> None:
    # Reference: clarabel. The stated ε is lowered to just above and just below what each VOP needs.
    vop_set, model = pair
    program = SemidefiniteProgram(model.matrices())
    needed = np.array([-program.best_margin(a) for a in vop_set.matrices]) / vop_set.worst_case
    for eps in (np.sort(needed)[[0, len(needed) // 2, -1]].repeat(2) + np.tile([-3e-6, 3e-6], 3)).clip(1e-9):
        result = prove(replace(vop_set, overestimation=float(eps)), model)
        refuted = {item.index for item in result.overestimation.unproved}
        assert refuted == set(np.flatnonzero(needed > eps))


def test_a_bound_is_called_relative_exactly_where_s_is_below_a_combination_of_matrices(
    pair: tuple[vop.VopSet, vop.SarModel], tmp_path: Path
) -> None:
    # Reference: clarabel says by how much Σ c Q can exceed a direction's S; S is scaled to either side.
    _, model = pair
    rng = np.random.default_rng(9)
    shape = np.cov(rng.normal(size=(4, 30))) + np.eye(4)
    root = np.linalg.inv(np.linalg.cholesky(shape))
    program = SemidefiniteProgram(root @ model.matrices() @ root.conj().T)
    largest = program.best_margin(np.zeros((4, 4)))
    for factor, wanted in ((0.9999, True), (1.0001, False)):
        s = factor * largest * shape
        vop_set = vop.VopSet(
            packed=pack(model.matrices() + 0.01 * s, np.float32),
            overestimation=0.011,
            worst_case=plain_clustering(model, 0.5).worst_case,
            overestimation_matrix=s.astype(complex),
            core_index=np.arange(len(model)),
            method="by hand",
            metadata=model.metadata,
        )
        path = tmp_path / f"{factor}.h5"
        result = prove(vop_set, model, certificate_path=path)
        assert result.holds
        assert result.relative == wanted == recheck(vop_set, model, path).relative
        assert ("for every w" in result.summary()) == wanted
        assert ("not proved, so that" in result.summary()) == (not wanted)


def test_core_indices_are_hints_and_never_evidence(pair: tuple[vop.VopSet, vop.SarModel]) -> None:
    vop_set, model = pair
    for wrong in (-1, 0, len(model) - 1, 10**9, -7):
        misled = replace(vop_set, core_index=np.full(len(vop_set), wrong))
        assert prove(misled, model).holds
    # A hint cannot make a false statement true: the VOP is far above the matrix it names.
    tall = replace(vop_set, packed=(vop_set.packed * 1.5).astype(np.float32))
    assert not prove(tall, model).overestimation.holds


def test_a_worst_case_stated_too_large_is_refused_by_one_unit_in_the_last_place() -> None:
    # Closed form: λmax of these integers is 8 exactly, attained along any multiple of (1, 1).
    q = np.array([[[4.0, 4.0], [4.0, 4.0]], [[1.0, 0.0], [0.0, 3.0]]], dtype=complex)
    model = vop.SarModel(pack(q, np.float32), metadata(2))
    for worst, wanted in ((8.0, True), (np.nextafter(8.0, 9.0), False), (7.99, True)):
        result = prove(set_of(q * 1.01, model, 0.05, worst=worst), model)
        assert result.worst_case_attained == wanted
        assert result.holds == wanted


def test_result_is_the_same_for_any_number_of_threads(
    pair: tuple[vop.VopSet, vop.SarModel], tmp_path: Path
) -> None:
    vop_set, _ = pair
    model = smooth_model(0, 4, 150)
    big = replace(model, packed=np.tile(model.packed, (12, 1)))
    sums = []
    before = numba.get_num_threads()
    try:
        for threads in range(1, min(4, numba.config.NUMBA_NUM_THREADS) + 1):
            numba.set_num_threads(threads)
            path = tmp_path / f"{threads}.h5"
            assert prove(vop_set, big, certificate_path=path).holds
            sums.append(Certificate.load(path, len(big), len(vop_set), 4).digest())
    finally:
        numba.set_num_threads(before)
    assert len(set(sums)) == 1


def test_the_proof_shares_no_code_with_the_compressor_but_packing_and_data_classes() -> None:
    # Read from the source with Python's own parser: what each side imports from this package, followed
    # to the end, save through the classes of data that pass between them.
    package = Path(vop.__file__).parent
    data = {"cubes", "errors", "grid", "hermitian", "matrices", "metadata", "progress", "sarmodel"}
    data = {f"vop.{name}" for name in (*data, "storage", "vopset")}

    def imported(start: list[Path]) -> set[str]:
        found, to_read = set(), list(start)
        while to_read:
            for node in ast.walk(ast.parse(to_read.pop().read_text(encoding="utf-8"))):
                if not (isinstance(node, ast.ImportFrom) and (node.module or "").startswith("vop")):
                    continue
                for name in (node.module, *(f"{node.module}.{alias.name}" for alias in node.names)):
                    path = package.parent / (name.replace(".", "/") + ".py")
                    if path.exists() and name not in found:
                        found.add(name)
                        to_read += [] if name in data else [path]
        return found

    proof = imported([*(package / "proof").glob("*.py")])
    compressor = imported([*(package / "compression").glob("*.py")])
    assert "vop.kernels.proof_psd" in proof
    assert "vop.hermitian" in proof & compressor
    assert proof & compressor <= data


def test_single_and_double_precision_are_not_mixed_up(pair: tuple[vop.VopSet, vop.SarModel]) -> None:
    vop_set, model = pair
    with pytest.raises(InputError, match="float32"):
        prove(replace(vop_set, packed=vop_set.packed.astype(float)), model)


def test_set_and_model_of_different_channels_or_references_are_refused(
    pair: tuple[vop.VopSet, vop.SarModel],
) -> None:
    vop_set, model = pair
    other = vop.SarModel.from_matrices(model.matrices(), reference="port voltage")
    with pytest.raises(InputError, match="belong together"):
        prove(vop_set, other)
    with pytest.raises(InputError, match="channels"):
        prove(vop_set, smooth_model(0, 5, 10))


def test_a_model_that_holds_nan_is_not_proved(pair: tuple[vop.VopSet, vop.SarModel]) -> None:
    vop_set, model = pair
    packed = model.packed.copy()
    packed[17, 3] = np.nan
    result = prove(vop_set, replace(model, packed=packed))
    assert [item.index for item in result.underestimation.unproved] == [17]


@pytest.mark.parametrize("value", [np.nan, np.inf])
def test_a_set_that_holds_what_is_no_number_is_refused(
    pair: tuple[vop.VopSet, vop.SarModel], value: float
) -> None:
    vop_set, model = pair
    packed = vop_set.packed.copy()
    packed[1, 5] = value
    with pytest.raises(InputError, match="NaN or infinite"):
        prove(replace(vop_set, packed=packed), model)


def test_a_single_channel_is_proved_and_refuted() -> None:
    # Closed form: 1×1 matrices are numbers.
    model = vop.SarModel.from_matrices(np.array([1.0, 2.0, 4.0]).reshape(3, 1, 1) + 0j)
    assert prove(set_of(np.array([[[4.1]]]), model, 0.05), model).holds
    low = prove(set_of(np.array([[[3.9]]]), model, 0.05), model)
    assert [item.index for item in low.underestimation.unproved] == [2]
    high = prove(set_of(np.array([[[4.3]]]), model, 0.05), model)
    assert high.underestimation.holds
    assert not high.overestimation.holds


# Certificates


def test_a_certificate_rechecks_to_the_same_result(
    pair: tuple[vop.VopSet, vop.SarModel], tmp_path: Path
) -> None:
    vop_set, model = pair
    path = tmp_path / "certificate.h5"
    first = prove(vop_set, model, certificate_path=path)
    again = recheck(vop_set, model, path)
    assert again.holds
    assert {**first.record()} == {**again.record()}
    with pytest.raises(OutputError, match="exists"):
        prove(vop_set, model, certificate_path=path)


def test_a_certificate_is_not_written_for_a_set_that_is_not_proved(
    pair: tuple[vop.VopSet, vop.SarModel], tmp_path: Path
) -> None:
    vop_set, model = pair
    broken = replace(vop_set, packed=(vop_set.packed * 0.9).astype(np.float32))
    assert not prove(broken, model, certificate_path=tmp_path / "c.h5").holds
    assert not list(tmp_path.iterdir())


def test_a_certificate_about_another_set_or_model_is_refused(
    pair: tuple[vop.VopSet, vop.SarModel], tmp_path: Path
) -> None:
    vop_set, model = pair
    path = tmp_path / "certificate.h5"
    prove(vop_set, model, certificate_path=path)
    packed = model.packed.copy()
    packed[0, 0] = np.nextafter(packed[0, 0], np.float32(np.inf))
    with pytest.raises(InputError, match="another model"):
        recheck(vop_set, replace(model, packed=packed), path)
    with pytest.raises(InputError, match="another set"):
        recheck(replace(vop_set, overestimation=0.051), model, path)
    with pytest.raises(InputError, match="rows"):
        recheck(vop_set, replace(model, packed=model.packed[:-1]), path)


@pytest.mark.parametrize(
    ("item", "at", "change", "message"),
    [
        ("underestimation/weight", 3, lambda x: x - 1, "do not sum to 1"),
        ("overestimation/weight", 0, lambda x: x // 2, "do not sum to 1"),
        ("underestimation/weight", 3, lambda x: -x, "outside"),
        ("underestimation/index", 5, lambda x: 10**6, "index is outside"),
        ("underestimation/starts", 5, lambda x: x + 7, "not in order|do not sum"),
        ("worst_case/row", (), lambda x: -1, "worst_case"),
    ],
)
def test_an_altered_certificate_is_refused_even_with_its_seal_renewed(
    pair: tuple[vop.VopSet, vop.SarModel], tmp_path: Path, item: str, at: object, change, message: str
) -> None:
    vop_set, model = pair
    path = tmp_path / "certificate.h5"
    prove(vop_set, model, certificate_path=path)
    whole = path.read_bytes()
    with h5py.File(path, "r+") as handle:
        handle[item][at] = change(handle[item][at])
    with pytest.raises(InputError, match=r"altered or damaged|truncated"):
        recheck(vop_set, model, path)
    assert path.read_bytes() != whole
    seal(path)
    with pytest.raises(InputError, match=message):
        recheck(vop_set, model, path)


def test_sound_looking_weights_that_prove_nothing_do_not_hold(
    pair: tuple[vop.VopSet, vop.SarModel], tmp_path: Path
) -> None:
    # A forger may renew digest and seal, and keep the sums: the inequalities still fail.
    vop_set, model = pair
    path = tmp_path / "certificate.h5"
    prove(vop_set, model, certificate_path=path)
    true = Certificate.load(path, len(model), len(vop_set), 4)
    index = (true.underestimation.index + 1) % len(vop_set)
    forged = replace(true, underestimation=replace(true.underestimation, index=index))
    forged.save(path, model.metadata, force=True)
    result = recheck(vop_set, model, path)
    assert not result.holds
    assert 0 < len(result.underestimation.unproved) <= len(model)
    weak = replace(true.worst_case, excitation=np.array([1, 0, 0, 0], dtype=complex))
    replace(true, worst_case=weak).save(path, model.metadata, force=True)
    assert not recheck(vop_set, model, path).worst_case_attained
