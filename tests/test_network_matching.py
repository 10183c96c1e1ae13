"""L-sections: Pozar's worked example, what matching must do, and scikit-rf's own lumped elements."""

from __future__ import annotations

import numpy as np
import pytest
from network_cases import FREQUENCY_HZ, Z0_OHM, loop_array

from vop.errors import InputError
from vop.network import accepted_power, l_sections, match_array, terminate, z_to_s


def test_pozars_example_of_an_l_section() -> None:
    # Pozar, Microwave Engineering, example 5.1 (quoted from memory): Z_L = 200 − j100 Ω to 100 Ω at
    # 500 MHz: C = 0.92 pF with L = 38.8 nH, or C = 2.61 pF with L = 46.1 nH.
    first, second = l_sections(200 - 100j, 100.0)
    assert first.shunt_at_load
    assert second.shunt_at_load
    one, two = first.components(500e6), second.components(500e6)
    assert one["shunt C (F)"] == pytest.approx(0.92e-12, rel=0.01)
    assert one["series L (H)"] == pytest.approx(38.8e-9, rel=0.01)
    assert two["series C (F)"] == pytest.approx(2.61e-12, rel=0.01)
    assert two["shunt L (H)"] == pytest.approx(46.1e-9, rel=0.01)


@pytest.mark.parametrize("load", [10 + 5j, 10 + 400j, 69 + 936j, 300 - 20j, 50 + 0j, 49.9 + 0.1j, 0.1 - 900j])
def test_every_solution_turns_the_load_into_z0(load: complex) -> None:
    found = l_sections(load, Z0_OHM)
    assert len(found) >= 2
    for part in found:
        x, b = 1j * part.series_ohm, 1j * part.shunt_s
        seen = x + 1 / (1 / load + b) if part.shunt_at_load else 1 / (b + 1 / (load + x))
        assert seen == pytest.approx(Z0_OHM, abs=1e-9 * abs(load))


def test_a_load_outside_the_circle_has_two_solutions_and_one_inside_four() -> None:
    # R_L < Z0 and |Z_L|² > Z0 R_L: either order works.
    assert len(l_sections(10 + 400j, 50.0)) == 4
    assert len(l_sections(10 + 5j, 50.0)) == 2
    assert len(l_sections(300 - 20j, 50.0)) == 2


def test_all_ports_are_matched_with_all_networks_in_place_by_scikit_rfs_account() -> None:
    skrf = pytest.importorskip("skrf")
    s = z_to_s(loop_array(4, 60.0, 0.02), Z0_OHM)
    matched = match_array(s, Z0_OHM)
    media = skrf.media.DefinedGammaZ0(skrf.Frequency.from_f([FREQUENCY_HZ], unit="hz"), z0=Z0_OHM)
    make = {
        "series L (H)": media.inductor,
        "series C (F)": media.capacitor,
        "shunt L (H)": media.shunt_inductor,
        "shunt C (F)": media.shunt_capacitor,
    }
    network = skrf.Network(f=[FREQUENCY_HZ], s=s[None], z0=Z0_OHM)
    for part in matched.sections:
        two = [make[name](value) for name, value in part.components(FREQUENCY_HZ).items()]
        assert len(two) == 2
        series, shunt = two
        section = series**shunt if part.shunt_at_load else shunt**series
        # A two-port's free port takes the place of the one it joins; turning the ports round by one after
        # each lets the next array port come first, and all are back in order at the end.
        network = skrf.network.connect(network, 0, section, 1)
        network.renumber([0, 1, 2, 3], [3, 0, 1, 2])
    np.testing.assert_allclose(network.s[0], matched.change.scattering, atol=1e-8)
    assert np.abs(network.s[0].diagonal()).max() < 1e-8


def test_matching_without_loss_conserves_power_and_leaves_only_coupling() -> None:
    s = z_to_s(loop_array(4, 60.0, 0.02), Z0_OHM)
    change = match_array(s, Z0_OHM).change
    t = change.transform
    np.testing.assert_allclose(
        accepted_power(change.scattering), t.conj().T @ accepted_power(s) @ t, atol=1e-10
    )
    assert np.abs(change.scattering.diagonal()).max() <= 1e-9
    # The bare array reflects nearly everything, the matched one little.
    assert accepted_power(s).diagonal().real.max() < 0.02
    assert accepted_power(change.scattering).diagonal().real.min() > 0.5


def test_one_port_matched_accepts_all_and_its_wave_grows_by_the_mismatch() -> None:
    # Closed form, one port: |a|² = 1/(1 − |S|²).
    s = terminate(z_to_s(loop_array(2), Z0_OHM), Z0_OHM, {1: np.inf}).scattering
    t = match_array(s, Z0_OHM).change.transform
    assert abs(t[0, 0]) ** 2 == pytest.approx(1 / (1 - abs(s[0, 0]) ** 2))


def test_the_interval_of_one_matched_port_is_its_closed_form() -> None:
    # ‖a‖² ∝ 1/|1 − GΔ|² with |G| = |S|/(1 − |S|²).
    s, delta = np.array([[0.985 * np.exp(0.1j)]]), 1e-3
    factor = match_array(s, Z0_OHM, accuracy=delta).change.factor
    assert factor is not None
    g = delta * 0.985 / (1 - 0.985**2)
    assert factor.low == pytest.approx((1 + g) ** -2)
    assert factor.high == pytest.approx((1 - g) ** -2)


def test_near_total_reflection_a_coarse_s_is_refused() -> None:
    s = np.array([[0.992 * np.exp(0.1j)]])
    with pytest.raises(InputError, match="more than a factor of two"):
        match_array(s, Z0_OHM, accuracy=0.01)
    match_array(s, Z0_OHM)  # without a stated accuracy nothing is known, and nothing is promised


def test_a_port_without_loss_cannot_be_matched() -> None:
    with pytest.raises(InputError, match="accepts no power"):
        match_array(np.array([[np.exp(0.3j)]]), Z0_OHM)


def test_the_asked_solution_is_taken() -> None:
    s = z_to_s(np.array([[10 + 400j]]), 50.0)
    for number, wanted in enumerate(l_sections(10 + 400j, 50.0)):
        found = match_array(s, 50.0, solutions=[number]).sections[0]
        assert found.shunt_at_load == wanted.shunt_at_load
        assert found.series_ohm == pytest.approx(wanted.series_ohm)
        assert found.shunt_s == pytest.approx(wanted.shunt_s)
    with pytest.raises(InputError, match="there are 4"):
        match_array(s, 50.0, solutions=[4])


def test_two_capacitors_are_preferred_where_they_match() -> None:
    part = match_array(z_to_s(np.array([[10 + 400j]]), 50.0), 50.0).sections[0]
    assert sorted(part.components(FREQUENCY_HZ)) == ["series C (F)", "shunt C (F)"]
