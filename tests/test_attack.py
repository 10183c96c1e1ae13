"""The attack: its figures against plain numpy, its finds against closed forms, its silence against proof."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from proof_cases import metadata, plain_clustering, set_of, smooth_model

import vop
from vop.attack import attack
from vop.attack.draw import Draw
from vop.attack.evaluate import SINGLE, Evaluator, functionals_of
from vop.errors import InputError
from vop.hermitian import pack


@pytest.fixture(scope="module")
def pair() -> tuple[vop.VopSet, vop.SarModel]:
    """A sound set and its model."""
    model = smooth_model(1, 4, 120)
    return plain_clustering(model, 0.05), model


def _sar(matrices: np.ndarray, w: np.ndarray) -> float:
    """max wᴴQw, with numpy alone."""
    return float(np.einsum("i,kij,j->k", w.conj(), matrices, w).real.max())


def test_ratios_reported_are_those_that_numpy_finds(pair: tuple[vop.VopSet, vop.SarModel]) -> None:
    vop_set, model = pair
    found = attack(vop_set, model, 20_000)
    a, q = vop_set.matrices, model.matrices()
    for ratio, w in (
        (found.smallest_ratio, found.smallest_excitation),
        (found.largest_ratio, found.largest_excitation),
    ):
        assert _sar(a, w) / _sar(q, w) == pytest.approx(ratio, rel=1e-12)
        assert np.linalg.norm(w) == pytest.approx(1)
    x = found.smallest_covariance
    along = [np.trace(m @ x, axis1=1, axis2=2).real.max() for m in (a, q)]
    assert along[0] / along[1] == pytest.approx(found.smallest_ratio_covariance, rel=1e-12)
    assert np.trace(x).real == pytest.approx(1)
    w = found.largest_bound_excitation
    used = (_sar(a, w) - _sar(q, w)) / (vop_set.overestimation * vop_set.worst_case)
    assert used == pytest.approx(found.largest_bound_use, rel=1e-9)


def test_a_proved_set_withstands_and_its_closest_calls_are_close(
    pair: tuple[vop.VopSet, vop.SarModel],
) -> None:
    vop_set, model = pair
    assert vop.prove(vop_set, model).holds
    found = attack(vop_set, model, 20_000)
    assert not found.broken
    assert 1 <= found.smallest_ratio < 1.01
    assert found.largest_bound_use <= 1
    assert "BROKEN" not in found.summary()


def test_a_deficit_that_only_one_direction_sees_is_found() -> None:
    # Closed form: the VOP 1.02·1 − 0.04·uuᴴ with a unit u is below Q = 1 only along u, by 0.02; the
    # smallest ratio is 0.98, at u, and directions within acos √0.5 of it are the only failures.
    rng = np.random.default_rng(0)
    n = 6
    u = rng.normal(size=n) + 1j * rng.normal(size=n)
    u /= np.linalg.norm(u)
    model = vop.SarModel(pack(np.eye(n)[None], np.float32), metadata(n))
    vop_set = set_of((1.02 * np.eye(n) - 0.04 * np.outer(u, u.conj()))[None], model, 0.05)
    found = attack(vop_set, model, 1000)
    assert found.broken
    assert found.smallest_ratio == pytest.approx(0.98, abs=1e-4)
    assert abs(np.vdot(found.smallest_excitation, u)) > 0.99
    assert "underestimates" in found.summary()


def test_a_failure_that_needs_a_covariance_is_found_although_no_excitation_sees_it() -> None:
    # Closed form: for n = 2, Q = 1/2 + h and VOPs 1/2 ± σ/2, σ each Pauli matrix, six in all. wᴴσw of a
    # unit w is a unit vector on the sphere, whose largest coordinate is at least 1/√3: some VOP gives
    # at least 1/2 + 1/(2√3), more than Q. X = 1/2 has tr(AX) = 1/2 for all six, less than tr(QX).
    pauli = np.array([[[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]])
    vops = 0.5 * np.concatenate([np.eye(2) + pauli, np.eye(2) - pauli])
    h = 2.0**-6
    model = vop.SarModel(pack((0.5 + h) * np.eye(2)[None], np.float32), metadata(2))
    vop_set = set_of(vops, model, 10.0)
    found = attack(vop_set, model, 5000)
    assert found.underestimated
    assert found.smallest_ratio == pytest.approx((0.5 + 0.5 / np.sqrt(3)) / (0.5 + h), rel=1e-3)
    assert found.smallest_ratio > 1
    assert found.smallest_ratio_covariance == pytest.approx(0.5 / (0.5 + h), rel=1e-3)
    assert "average of several" in found.summary()
    assert [item.index for item in vop.prove(vop_set, model).underestimation.unproved] == [0]


def test_overestimation_beyond_the_bound_is_found(pair: tuple[vop.VopSet, vop.SarModel]) -> None:
    # The VOP of the worst case, raised along its own peak by three bounds.
    vop_set, model = pair
    k = int(np.argmax(np.linalg.eigvalsh(vop_set.matrices)[:, -1]))
    peak = np.linalg.eigh(vop_set.matrices[k])[1][:, -1]
    packed = vop_set.packed.copy()
    bound = vop_set.overestimation * vop_set.worst_case
    packed[k] += pack(3 * bound * np.outer(peak, peak.conj()), np.float32)
    found = attack(replace(vop_set, packed=packed), model, 2000)
    assert found.overestimated
    assert not found.underestimated
    assert found.largest_bound_use > 2
    assert "beyond its bound" in found.summary()


def test_equal_values_are_not_called_broken_by_rounding(pair: tuple[vop.VopSet, vop.SarModel]) -> None:
    # The model as its own set: every ratio is 1, give or take rounding.
    _, model = pair
    same = set_of(model.matrices(), model, 0.05)
    found = attack(same, model, 5000)
    assert found.smallest_ratio == pytest.approx(1, abs=1e-12)
    assert not found.broken


def test_single_precision_proposes_to_the_accuracy_it_is_allowed(
    pair: tuple[vop.VopSet, vop.SarModel],
) -> None:
    vop_set, model = pair
    evaluate, draw = Evaluator(vop_set, model), Draw(vop_set, model, 0)
    for batch in range(6):
        f = functionals_of(draw.excitations(batch, 200))
        assert np.allclose(evaluate.single(f)[0], evaluate.double(f)[0], rtol=0.1 * SINGLE)


def test_every_kind_of_draw_has_unit_power_and_every_rank_occurs(
    pair: tuple[vop.VopSet, vop.SarModel],
) -> None:
    vop_set, model = pair
    draw = Draw(vop_set, model, 3)
    for batch in range(6):
        w = draw.excitations(batch, 101)
        assert w.shape == (101, 4, 1)
        assert np.allclose(np.linalg.norm(w, axis=1), 1)
    assert {np.linalg.matrix_rank(draw.covariances(batch, 5)[0]) for batch in range(3)} == {2, 3, 4}


def test_same_seed_same_result_and_another_seed_other_draws(
    pair: tuple[vop.VopSet, vop.SarModel],
) -> None:
    vop_set, model = pair
    one, two, other = (attack(vop_set, model, 3000, seed=seed) for seed in (5, 5, 6))
    assert one.smallest_ratio == two.smallest_ratio
    assert one.largest_ratio == two.largest_ratio
    assert np.array_equal(one.smallest_excitation, two.smallest_excitation)
    draws = [Draw(vop_set, model, seed).excitations(0, 10) for seed in (5, 6)]
    assert not np.allclose(*draws)
    assert other.n_excitations == one.n_excitations


def test_one_channel_and_nonsense_are_handled() -> None:
    model = vop.SarModel.from_matrices(np.array([1.0, 2.0]).reshape(2, 1, 1) + 0j)
    assert not attack(set_of(np.array([[[2.05]]]), model, 0.05), model, 10).broken
    assert attack(set_of(np.array([[[1.9]]]), model, 0.05), model, 10).underestimated
    with pytest.raises(InputError, match="at least 1"):
        attack(set_of(np.array([[[2.0]]]), model, 0.05), model, 0)
    with pytest.raises(InputError, match="belong together"):
        attack(set_of(np.array([[[2.0]]]), model, 0.05), smooth_model(0, 2, 3), 10)
