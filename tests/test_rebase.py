"""Change of excitation from files, against scikit-rf and conservation of power."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import vop
from vop.errors import InputError
from vop.hermitian import pack, round_outward
from vop.metadata import Domain, Metadata, Reference
from vop.rebase import rebase_by_matrix, rebase_by_network
from vop.sarmodel import SarModel

FREQUENCY = 297.2e6


def _array(folder: Path, n: int = 3, reflection: float = 0.6) -> tuple[SarModel, np.ndarray]:
    """A coupled lossless-to-radiation array whose body takes all accepted power, and its S on disk."""
    import skrf

    rng = np.random.default_rng(4)
    s = 0.1 * (rng.normal(size=(n, n)) + 1j * rng.normal(size=(n, n)))
    s = 0.5 * (s + s.T) + reflection * np.diag(np.exp(1j * np.arange(n)))
    s *= 0.9 / np.linalg.norm(s, 2)
    network = skrf.Network(f=[FREQUENCY], f_unit="Hz", s=s[None], z0=50)
    network.write_touchstone("array", dir=str(folder), form="ri")
    absorbed = np.eye(n) - s.conj().T @ s
    meta = Metadata(Reference("forward power"), tuple("abc"[:n]), Domain(frequency_hz=FREQUENCY))
    model = SarModel(round_outward(pack(absorbed[None])), meta, None, {"absorbed power": absorbed})
    return model, s


def test_matching_keeps_power_and_leaves_nothing_reflected_by_a_port_alone(tmp_path: Path) -> None:
    # Conservation: lossless networks; absorbed = accepted = I − S'ᴴS' at the new ports. S' of scikit-rf.
    model, _ = _array(tmp_path)
    made, lines = rebase_by_network(model, tmp_path / "array.s3p", match=True, accuracy=1e-6)
    absorbed = made.global_matrices["absorbed power"]
    values = np.linalg.eigvalsh(absorbed)
    assert values[-1] <= 1 + 1e-9
    assert absorbed.trace().real > model.global_matrices["absorbed power"].trace().real
    # One number that no lossless network changes: the worst SAR per accepted watt, here 1 by construction.
    assert np.allclose(made.matrices()[0], absorbed, rtol=1e-5)
    assert sum("channel" in line for line in lines) == 3
    assert any("of nominal" in line for line in lines)
    assert made.metadata.reference.plane == "amplifier side of the matching networks"


def test_a_closed_port_is_what_scikit_rf_says(tmp_path: Path) -> None:
    # Reference: scikit-rf's connection of a load to one port of a network.
    import skrf

    model, s = _array(tmp_path)
    made, _ = rebase_by_network(model, tmp_path / "array.s3p", closed=["2=20+15j"])
    network = skrf.Network(f=[FREQUENCY], f_unit="Hz", s=s[None], z0=50)
    gamma = (20 + 15j - 50) / (20 + 15j + 50)
    load = skrf.Network(f=[FREQUENCY], f_unit="Hz", s=[[[gamma]]], z0=50)
    left = skrf.network.connect(network, 1, load, 0).s[0]
    # Accepted by the two ports = absorbed in the body + in the load (its resistance takes its share).
    accepted = np.eye(2) - left.conj().T @ left
    waves = np.linalg.solve(np.eye(3) - np.diag([0, gamma, 0]) @ s, np.eye(3)[:, [0, 2]])
    in_load = (1 - abs(gamma) ** 2) * np.outer((s @ waves)[1].conj(), (s @ waves)[1])
    assert made.metadata.channel_names == ("a", "c")
    assert np.allclose(made.global_matrices["absorbed power"], accepted - in_load, atol=1e-10)
    assert any("accuracy nobody stated" in w for w in made.metadata.warnings)


def test_an_s_matrix_too_inaccurate_for_matching_is_refused(tmp_path: Path) -> None:
    model, _ = _array(tmp_path)
    with pytest.raises(InputError, match="factor of"):
        rebase_by_network(model, tmp_path / "array.s3p", match=True, accuracy=0.3)


@pytest.mark.parametrize("text", ["9=50", "0=50", "2", "2=", "x=50", "2=fifty"])
def test_a_port_that_makes_no_sense_is_named(tmp_path: Path, text: str) -> None:
    model, _ = _array(tmp_path)
    with pytest.raises(InputError, match="PORT=OHM"):
        rebase_by_network(model, tmp_path / "array.s3p", closed=[text])


def test_any_matrix_needs_names_and_a_reason(tmp_path: Path) -> None:
    model, _ = _array(tmp_path)
    t = np.array([[1, 0], [0, 1j], [0, 0]])
    np.save(tmp_path / "T.npy", t)
    with pytest.raises(InputError, match="--names"):
        rebase_by_matrix(model, tmp_path / "T.npy", None, "why")
    with pytest.raises(InputError, match="--reason"):
        rebase_by_matrix(model, tmp_path / "T.npy", "p,q", None)
    made, _ = rebase_by_matrix(model, tmp_path / "T.npy", "p,q", "two amplifiers")
    assert np.allclose(made.matrices()[0], t.conj().T @ model.matrices()[0] @ t, atol=1e-6)
    np.save(tmp_path / "bad.npy", np.array([{"a": 1}], dtype=object), allow_pickle=True)
    with pytest.raises(InputError, match="NPY"):
        rebase_by_matrix(model, tmp_path / "bad.npy", "p,q", "pickles are not opened")


def test_only_forward_power_has_waves(tmp_path: Path) -> None:
    _array(tmp_path)
    other = vop.SarModel.from_matrices(np.eye(3)[None], reference="accepted power")
    with pytest.raises(InputError, match="act on waves"):
        rebase_by_network(other, tmp_path / "array.s3p", match=True)
