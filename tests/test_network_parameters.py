"""S, Z, Y and reference impedances, against scikit-rf (a general-purpose network library)."""

from __future__ import annotations

import numpy as np
import pytest
from network_cases import FREQUENCY_HZ, passive_s

from vop.errors import InputError
from vop.network import renormalise, s_to_y, s_to_z, y_to_s, z_to_s

skrf = pytest.importorskip("skrf")

UNEQUAL = np.array([50.0, 75.0, 12.5, 200.0])


@pytest.mark.parametrize("z0", [50.0, UNEQUAL])
def test_z_and_y_agree_with_scikit_rf_for_equal_and_unequal_reference_impedances(z0: object) -> None:
    s = passive_s(1, 4)
    np.testing.assert_allclose(s_to_z(s, z0), skrf.network.s2z(s[None], z0)[0], rtol=1e-11)
    np.testing.assert_allclose(s_to_y(s, z0), skrf.network.s2y(s[None], z0)[0], rtol=1e-11)


@pytest.mark.parametrize("z0", [50.0, UNEQUAL])
def test_s_comes_back_from_z_and_from_y(z0: object) -> None:
    s = passive_s(2, 4)
    np.testing.assert_allclose(z_to_s(s_to_z(s, z0), z0), s, rtol=1e-11)
    np.testing.assert_allclose(y_to_s(s_to_y(s, z0), z0), s, rtol=1e-11)


def test_renormalising_agrees_with_scikit_rf() -> None:
    s = passive_s(3, 4)
    network = skrf.Network(f=[FREQUENCY_HZ], s=s[None], z0=UNEQUAL)
    new = np.array([33.0, 50.0, 75.0, 10.0])
    network.renormalize(new)
    np.testing.assert_allclose(renormalise(s, UNEQUAL, new).scattering, network.s[0], rtol=1e-11)


def test_renormalising_leaves_voltages_and_currents_alone() -> None:
    # Closed form: V = √Z0 (a + b), I = (a − b)/√Z0 on both sides of the plane.
    s, new = passive_s(4, 4), np.array([33.0, 50.0, 75.0, 10.0])
    change = renormalise(s, UNEQUAL, new)
    w = np.array([1.0, 2j, -0.5, 0.3 - 1j])
    a = change.transform @ w
    one = np.eye(4)
    volts = np.sqrt(UNEQUAL) * ((one + s) @ a), np.sqrt(new) * ((one + change.scattering) @ w)
    amps = ((one - s) @ a) / np.sqrt(UNEQUAL), ((one - change.scattering) @ w) / np.sqrt(new)
    np.testing.assert_allclose(*volts, rtol=1e-12)
    np.testing.assert_allclose(*amps, rtol=1e-12)


def test_an_open_circuit_has_no_impedance_matrix() -> None:
    with pytest.raises(InputError, match="Z does not exist"):
        s_to_z(np.eye(2), 50.0)
    np.testing.assert_allclose(s_to_y(np.eye(2), 50.0), 0, atol=1e-15)


@pytest.mark.parametrize("z0", [0.0, -50.0, np.nan, 50 + 1j, [50.0, 75.0]])
def test_impossible_reference_impedances_are_refused(z0: object) -> None:
    with pytest.raises(InputError, match="reference impedance"):
        s_to_z(passive_s(5, 3), z0)


def test_s_that_is_no_square_matrix_of_finite_numbers_is_refused() -> None:
    for bad in (np.zeros((2, 3)), np.array([[np.nan]]), np.array([["0"]]), np.zeros(4)):
        with pytest.raises(InputError, match="S "):
            s_to_z(bad, 50.0)
