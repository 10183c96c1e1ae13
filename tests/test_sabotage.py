"""Sets broken on purpose: proof, attack and an independent semidefinite solver must agree.

A change counts as sabotage only if the solver (clarabel, :class:`proof_cases.SemidefiniteProgram`) says
that it breaks the set: no weights over the VOPs reach some matrix of the model any more.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from proof_cases import SemidefiniteProgram, plain_clustering, smooth_model

import vop
from vop.attack import attack
from vop.hermitian import pack

_EPS = 0.1
#: Cases closer to the boundary than the solver resolves prove nothing either way; fraction of scale.
_RESOLVED = 3e-6


@pytest.fixture(scope="module")
def sound() -> tuple[vop.VopSet, vop.SarModel]:
    """A set that clarabel and the proof call sound, and its model."""
    model = smooth_model(2, 3, 40, harmonics=1)
    vop_set = plain_clustering(model, _EPS - 1e-4)
    # A little room, so that the solver can tell on which side of the boundary the sound set is.
    roomy = vop_set.matrices + 0.9e-4 * vop_set.worst_case * np.eye(3)
    vop_set = replace(vop_set, packed=pack(roomy, np.float32), overestimation=_EPS)
    assert 4 <= len(vop_set) <= 20
    assert _label(vop_set, model) == "sound"
    assert vop.prove(vop_set, model).holds
    return vop_set, model


def _margins(vop_set: vop.VopSet, model: vop.SarModel) -> np.ndarray:
    """Best λmin(Σ c A − Q) of each matrix, by the solver, as a fraction of the scale."""
    program = SemidefiniteProgram(vop_set.matrices)
    return np.array([program.best_margin(q) for q in model.matrices()]) / program.scale


def _label(vop_set: vop.VopSet, model: vop.SarModel) -> str:
    least = _margins(vop_set, model).min()
    if abs(least) < _RESOLVED:
        return "on the boundary"
    return "sound" if least > 0 else "broken"


def _with(vop_set: vop.VopSet, k: int, matrix: np.ndarray) -> vop.VopSet:
    packed = vop_set.packed.copy()
    packed[k] = pack(matrix, np.float32)
    return replace(vop_set, packed=packed)


def _without(vop_set: vop.VopSet, k: int) -> vop.VopSet:
    keep = np.arange(len(vop_set)) != k
    return replace(vop_set, packed=vop_set.packed[keep], core_index=vop_set.core_index[keep])


def _swapped(a: np.ndarray, i: int, j: int) -> np.ndarray:
    order = np.arange(a.shape[0])
    order[[i, j]] = order[[j, i]]
    return a[np.ix_(order, order)]


def _sabotages(vop_set: vop.VopSet, k: int) -> dict[str, vop.VopSet]:
    a = vop_set.matrices[k]
    return {
        "scaled by 0.999": _with(vop_set, k, 0.999 * a),
        "scaled by 0.95": _with(vop_set, k, 0.95 * a),
        "conjugated": _with(vop_set, k, a.conj()),
        "channels swapped": _with(vop_set, k, _swapped(a, 0, 1)),
        "last channels swapped": _with(vop_set, k, _swapped(a, -1, -2)),
        "deleted": _without(vop_set, k),
        "duplicated over its neighbour": _with(vop_set, (k + 1) % len(vop_set), a),
    }


def _agree(vop_set: vop.VopSet, model: vop.SarModel) -> str:
    """The solver's label, with which proof and attack have been found to agree."""
    margins = _margins(vop_set, model)
    result = vop.prove(vop_set, model).underestimation
    refuted = {item.index for item in result.unproved}
    for v, margin in enumerate(margins):
        if abs(margin) > _RESOLVED:
            assert (v in refuted) == (margin < 0), f"matrix {v}, best margin {margin:.3g} of scale"
    for item in result.unproved:
        # Every refusal comes with evidence that plain numpy confirms.
        assert item.covariance is not None
        along = np.trace(vop_set.matrices @ item.covariance, axis1=1, axis2=2).real.max()
        assert np.trace(model.matrices(item.index) @ item.covariance).real > along
    found = attack(vop_set, model, 1500)
    if margins.min() > -_RESOLVED:
        assert not found.underestimated
    if any(item.excitation is not None and item.ratio > 1.001 for item in result.unproved):
        assert found.underestimated, "a single excitation sees this failure, the attack does not"
    if abs(margins.min()) < _RESOLVED:
        return "on the boundary"
    return "sound" if margins.min() > 0 else "broken"


def test_scaled_conjugated_swapped_and_deleted_vops_are_caught_exactly_where_they_break_the_set(
    sound: tuple[vop.VopSet, vop.SarModel],
) -> None:
    vop_set, model = sound
    labels: dict[str, list[str]] = {}
    for k in range(0, len(vop_set), 2):
        for name, altered in _sabotages(vop_set, k).items():
            labels.setdefault(name, []).append(_agree(altered, model))
    # Each kind does break the set for some VOP, so that none of the agreements above is idle ...
    for name in ("scaled by 0.95", "conjugated", "channels swapped", "deleted"):
        assert "broken" in labels[name], labels
    # ... and some changes are harmless, which the proof must not refuse.
    assert any("sound" in found for found in labels.values()), labels


@pytest.mark.parametrize("share", [0.5, 1.001])
def test_a_vop_moved_along_a_witness_breaks_the_set_when_its_margin_is_used_up(
    sound: tuple[vop.VopSet, vop.SarModel], share: float
) -> None:
    # For each matrix, its own peak x is a witness of what the set must reach there: max_k xᴴA_kx may fall
    # to xᴴQx and no further. All VOPs are lowered along x by a share of what each has above that.
    vop_set, model = sound
    for v in range(0, len(model), 9):
        x = np.linalg.eigh(model.matrices(v))[1][:, -1]
        needed = float(np.linalg.eigvalsh(model.matrices(v))[-1])
        packed = vop_set.packed.copy()
        for k, a in enumerate(vop_set.matrices):
            above = float(np.vdot(x, a @ x).real) - needed
            if above > 0:
                packed[k] = pack(a - share * above * np.outer(x, x.conj()), np.float32)
        lowered = replace(vop_set, packed=packed)
        label = _agree(lowered, model)
        if share > 1:
            assert label == "broken"
            found = attack(lowered, model, 1500)
            assert found.underestimated
            assert found.smallest_ratio < 1
        assert (_sar(lowered, x) < needed) == (share > 1)


def _sar(vop_set: vop.VopSet, w: np.ndarray) -> float:
    return float(np.einsum("i,kij,j->k", w.conj(), vop_set.matrices, w).real.max())


def test_a_vop_scaled_down_by_exactly_its_margin_stands_on_the_boundary(
    sound: tuple[vop.VopSet, vop.SarModel],
) -> None:
    # The solver's best margin falls as one VOP is scaled down. Bisection with the solver finds the scale
    # at which the set breaks; the proof must turn between just above and just below it.
    vop_set, model = sound
    turned = 0
    for k in range(0, len(vop_set), 3):
        a = vop_set.matrices[k]
        low, high = 0.5, 1.0
        if _margins(_with(vop_set, k, low * a), model).min() > 0:
            continue
        for _ in range(14):
            middle = 0.5 * (low + high)
            if _margins(_with(vop_set, k, middle * a), model).min() < 0:
                low = middle
            else:
                high = middle
        assert vop.prove(_with(vop_set, k, (high + 1e-5) * a), model).underestimation.holds
        assert not vop.prove(_with(vop_set, k, (low - 1e-5) * a), model).underestimation.holds
        turned += 1
    assert turned > 0


def test_a_deleted_vop_is_named_with_the_excitation_that_misses_it(
    sound: tuple[vop.VopSet, vop.SarModel],
) -> None:
    # The VOP of the worst case is indispensable: the peak of the worst matrix needs more than any other.
    vop_set, model = sound
    peaks = np.linalg.eigvalsh(vop_set.matrices)[:, -1]
    result = vop.prove(_without(vop_set, int(peaks.argmax())), model)
    worst = result.underestimation.unproved[0]
    assert worst.excitation is not None
    q = float(np.vdot(worst.excitation, model.matrices(worst.index) @ worst.excitation).real)
    assert q / _sar(_without(vop_set, int(peaks.argmax())), worst.excitation) == pytest.approx(worst.ratio)
    assert worst.ratio > 1
    assert str(worst.index) in result.summary()
