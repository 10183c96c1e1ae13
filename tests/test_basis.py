"""Change of basis Q → TᴴQT: SAR stays what it was, nothing becomes smaller, and proofs survive."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from conftest import random_matrices
from network_cases import Z0_OHM, loop_array, passive_s

from vop.basis import change_basis
from vop.errors import InputError
from vop.hermitian import pack, round_outward
from vop.kernels.congruence import congruence_outward
from vop.metadata import Reference
from vop.network import accepted_power, from_forward_power, match_array, z_to_s
from vop.proof import prove
from vop.sarmodel import SarModel
from vop.vopset import VopSet

NEW = Reference("forward power", plane="amplifier")


def _complex(rng: np.random.Generator, *shape: int) -> np.ndarray:
    return rng.normal(size=shape) + 1j * rng.normal(size=shape)


def _names(m: int) -> tuple[str, ...]:
    return tuple(f"new {c + 1}" for c in range(m))


def _change(thing, t):  # type: ignore[no-untyped-def]
    return change_basis(
        thing, t, reference=NEW, channel_names=_names(t.shape[1]), reason="test of the change of basis"
    )


def _model(n: int = 4, count: int = 60) -> SarModel:
    """Matrices inside the hull of the first three, for which those three are a set."""
    rng = np.random.default_rng(3)
    corners = random_matrices(rng, 3, n, rank=n)
    weights = rng.dirichlet(np.ones(3), size=count)
    inside = 0.98 * np.einsum("vk,kij->vij", weights, corners)
    model = SarModel.from_matrices(np.concatenate([corners, inside]))
    absorbed = 0.01 * corners.sum(axis=0)
    return replace(
        model,
        global_matrices={"absorbed power": absorbed},
        global_units={"absorbed power": "W per |w|^2"},
    )


def _set(model: SarModel, epsilon: float = 0.05) -> VopSet:
    n = model.n_channels
    corners = model.matrices(slice(0, 3))
    worst = float(np.linalg.eigvalsh(model.matrices())[:, -1].max()) * (1 - 1e-12)
    s = worst * np.eye(n)
    return VopSet(
        packed=round_outward(pack(corners + 0.5 * epsilon * s)),
        overestimation=epsilon,
        worst_case=worst,
        overestimation_matrix=s,
        core_index=np.arange(3),
        method="by hand",
        metadata=model.metadata,
        global_matrices=model.global_matrices,
        global_units=model.global_units,
    )


@pytest.mark.parametrize("m", [1, 2, 4, 7])
def test_sar_of_the_new_excitation_is_sar_of_the_old_one(m: int) -> None:
    model, rng = _model(), np.random.default_rng(m)
    t, w = _complex(rng, 4, m), _complex(rng, m)
    changed = _change(model, t)
    old = np.einsum("i,vij,j->v", (t @ w).conj(), model.matrices(), t @ w).real
    new = np.einsum("i,vij,j->v", w.conj(), changed.matrices(), w).real
    assert changed.n_channels == m
    np.testing.assert_allclose(new, old, rtol=1e-5)
    assert (new >= old).all()


def test_fields_combined_first_give_the_same_matrices() -> None:
    # By definition: Q of the combined fields E T is TᴴQT, from σ/(2ρ) conj(E_i)E_j alone.
    rng = np.random.default_rng(1)
    e, t = _complex(rng, 5, 3, 4), _complex(rng, 4, 2)
    model = SarModel.from_matrices(np.einsum("vxi,vxj->vij", e.conj(), e))
    wanted = np.einsum("vxi,vxj->vij", (e @ t).conj(), e @ t)
    np.testing.assert_allclose(_change(model, t).matrices(), wanted, rtol=1e-5, atol=1e-5)


@pytest.mark.parametrize("cancelling", [False, True])
def test_no_rounding_makes_a_matrix_smaller(cancelling: bool) -> None:
    # Against long double arithmetic, with a T that leaves 1e-12 of the matrix by cancellation, too.
    rng = np.random.default_rng(2)
    q = random_matrices(rng, 200, 5, rank=1)
    packed = round_outward(pack(q))
    exact_q = SarModel.from_matrices(q).matrices().astype(np.clongdouble)
    t = _complex(rng, 5, 3)
    if cancelling:
        v = np.linalg.svd(exact_q[0].astype(complex))[2][1:].conj().T
        t = v[:, :3] + 1e-6 * t
    wide = np.empty((200, 9))
    congruence_outward(packed, 5, np.ascontiguousarray(t), wide)
    tl = t.astype(np.clongdouble)
    exact = np.einsum("ki,vkl,lj->vij", tl.conj(), exact_q, tl)
    from vop.hermitian import unpack

    for found, bound in ((unpack(wide), 1e-12), (unpack(round_outward(wide)), 1e-5)):
        rest = (found.astype(np.clongdouble) - exact).astype(complex)
        assert (np.linalg.eigvalsh(rest)[:, 0] >= 0).all()
        scale = np.linalg.norm(q, axis=(1, 2)) * np.linalg.norm(t) ** 2
        assert (np.linalg.norm(rest, axis=(1, 2)) <= bound * scale).all()


def test_two_changes_are_one_change_by_their_product() -> None:
    model, rng = _model(), np.random.default_rng(4)
    first, second = _complex(rng, 4, 3), _complex(rng, 3, 3)
    twice, once = _change(_change(model, first), second), _change(model, first @ second)
    np.testing.assert_allclose(twice.matrices(), once.matrices(), rtol=1e-4, atol=1e-4)
    assert [len(c["transform_real"]) for c in twice.metadata.details["change_of_basis"]] == [4, 3]


def test_global_matrices_travel_with_the_local_ones() -> None:
    model = _model()
    t = _complex(np.random.default_rng(5), 4, 2)
    for changed in (_change(model, t), _change(_set(model), t)):
        wanted = t.conj().T @ model.global_matrices["absorbed power"] @ t
        np.testing.assert_allclose(changed.global_matrices["absorbed power"], wanted, rtol=1e-12)
        assert changed.global_units["absorbed power"] == "W per |w|^2"


@pytest.mark.parametrize(("shape", "stretch"), [((4, 4), 1.0), ((4, 4), 1e4), ((4, 2), 1.0), ((4, 6), 1.0)])
def test_a_changed_set_is_proved_against_the_changed_model(shape: tuple[int, int], stretch: float) -> None:
    # Ill-conditioned and rectangular T too: order survives the congruence, the hair pays for float32.
    model = _model()
    vop_set = _set(model)
    assert prove(vop_set, model).holds
    t = _complex(np.random.default_rng(6), *shape)
    t[:, 0] *= stretch
    changed = _change(vop_set, t)
    assert changed.overestimation == vop_set.overestimation
    result = prove(changed, _change(model, t))
    assert result.holds, result.summary()
    assert any("proved anew" in text for text in changed.metadata.warnings)


def test_a_set_changed_by_the_conjugate_fails_the_proof() -> None:
    # The lost conjugate: T* instead of T must not pass.
    model = _model()
    t = _complex(np.random.default_rng(7), 4, 4)
    assert not prove(_change(_set(model), t.conj()), _change(model, t)).holds


def test_the_worst_case_of_a_changed_set_is_one_that_the_model_attains() -> None:
    model = _model()
    t = _complex(np.random.default_rng(8), 4, 3)
    changed, largest = (
        _change(_set(model), t),
        float(np.linalg.eigvalsh(_change(model, t).matrices())[:, -1].max()),
    )
    assert 0.9 * largest < changed.worst_case <= largest


def test_the_record_says_what_was_done_and_survives_the_file(tmp_path) -> None:  # type: ignore[no-untyped-def]
    model = _model()
    t = _complex(np.random.default_rng(9), 4, 2)
    _change(model, t).save(tmp_path / "model.h5")
    metadata = SarModel.load(tmp_path / "model.h5").metadata
    (record,) = metadata.details["change_of_basis"]
    np.testing.assert_array_equal(
        np.array(record["transform_real"]) + 1j * np.array(record["transform_imag"]), t
    )
    assert record["reason"] == "test of the change of basis"
    assert record["from_channel_names"] == ["1", "2", "3", "4"]
    assert metadata.reference.plane == "amplifier"
    assert metadata.channel_names == ("new 1", "new 2")


def test_sar_per_volt_is_sar_of_the_waves_that_make_the_volts() -> None:
    model, s = _model(), passive_s(1, 4)
    change = from_forward_power("port voltage", s, Z0_OHM, phasor="rms")
    changed = change_basis(
        model,
        change.transform,
        reference=change.reference,
        channel_names=_names(4),
        reason="voltages at the ports",
    )
    a = np.array([1.0, 0.5j, -0.2, 1 + 1j])
    volts = np.sqrt(Z0_OHM) * (a + s @ a)
    old = np.einsum("i,vij,j->v", a.conj(), model.matrices(), a).real
    new = np.einsum("i,vij,j->v", volts.conj(), changed.matrices(), volts).real
    np.testing.assert_allclose(new, old, rtol=1e-5)
    assert changed.metadata.reference.sar_unit == "W/kg per V^2"
    assert changed.metadata.reference.phasor == "rms"


def test_lossless_matching_leaves_worst_sar_per_accepted_watt_alone() -> None:
    # Conservation of power: the same waves at the array are reached, at the same accepted power.
    model, s = _model(), z_to_s(loop_array(4, 60.0, 0.02), Z0_OHM)
    matched = match_array(s, Z0_OHM).change

    def worst(matrices: np.ndarray, accepted: np.ndarray) -> float:
        root = np.linalg.inv(np.linalg.cholesky(accepted))
        return float(np.linalg.eigvalsh(root @ matrices @ root.conj().T)[:, -1].max())

    after = _change(model, matched.transform)
    assert worst(after.matrices(), accepted_power(matched.scattering)) == pytest.approx(
        worst(model.matrices(), accepted_power(s)), rel=1e-4
    )


def test_what_cannot_be_a_change_of_basis_is_refused() -> None:
    model = _model()
    good = np.eye(4, dtype=complex)
    cases = [
        (np.ones((3, 4)), _names(4), "reason", "shape"),
        (np.full((4, 4), np.nan), _names(4), "reason", "NaN"),
        (good, _names(3), "reason", "3 channel names for 4"),
        (np.diag([1.0, 1, 1, 0]), _names(4), "reason", "'?new 4'? drives nothing"),
        (good, _names(4), " ", "state a reason"),
        (1e30 * good, _names(4), "reason", "float32"),
    ]
    for t, names, reason, why in cases:
        with pytest.raises(InputError, match=why):
            change_basis(model, t, reference=NEW, channel_names=names, reason=reason)


def test_new_excitations_that_drive_nothing_are_named() -> None:
    model = _model()
    assert not _change(model, np.eye(4)[:, :2]).metadata.warnings
    nearly = np.array([[1, 1], [0, 1e-9], [0, 0], [0, 0]])
    assert any("next to nothing" in text for text in _change(model, nearly).metadata.warnings)
    assert any("next to nothing" in text for text in _change(model, np.ones((4, 5))).metadata.warnings)
