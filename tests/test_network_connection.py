"""Networks connected to an array: against scikit-rf, Kirchhoff's laws, and conservation of power."""

from __future__ import annotations

import numpy as np
import pytest
from network_cases import FREQUENCY_HZ, Z0_OHM, loop_array, lossless_s, passive_s

from vop.errors import InputError
from vop.network import (
    Feed,
    accepted_power,
    cascade,
    connect,
    feed_of_blocks,
    parallel_rlc,
    port_powers,
    reflection,
    s_to_z,
    series_rlc,
    series_two_port,
    shift_reference_plane,
    shunt_two_port,
    terminate,
    z_to_s,
)

skrf = pytest.importorskip("skrf")


def _network(s: np.ndarray) -> object:
    return skrf.Network(f=[FREQUENCY_HZ], s=np.asarray(s)[None], z0=Z0_OHM)


def test_connecting_any_feed_agrees_with_scikit_rf() -> None:
    # Three amplifiers for five elements, everything coupled with everything.
    s, feed = passive_s(1, 5), passive_s(2, 8)
    found = connect(s, Z0_OHM, Feed(feed, 3, np.full(8, Z0_OHM)))
    wanted = skrf.network.connect(_network(feed), 3, _network(s), 0, num=5)
    np.testing.assert_allclose(found.scattering, wanted.s[0], rtol=1e-11)


def test_waves_at_the_array_solve_the_equations_of_both_networks_at_once() -> None:
    # Independent of the elimination: all 2(M + 2N) unknowns in one linear system.
    s, feed, m, n = passive_s(1, 5), passive_s(2, 8), 3, 5
    w = np.array([1.0, -0.3j, 0.5 + 0.5j])
    big = np.zeros((m + 2 * n, m + 2 * n), complex)
    right = np.zeros(m + 2 * n, complex)
    # unknowns: reflected at amplifiers (m), a (n), b (n)
    big[:m, :m] = np.eye(m)
    big[:m, m + n :] = -feed[:m, m:]
    right[:m] = feed[:m, :m] @ w
    big[m : m + n, m : m + n] = np.eye(n)
    big[m : m + n, m + n :] = -feed[m:, m:]
    right[m : m + n] = feed[m:, :m] @ w
    big[m + n :, m + n :] = np.eye(n)
    big[m + n :, m : m + n] = -s
    solution = np.linalg.solve(big, right)
    change = connect(s, Z0_OHM, Feed(feed, m, np.full(8, Z0_OHM)))
    np.testing.assert_allclose(change.transform @ w, solution[m : m + n], rtol=1e-11)
    np.testing.assert_allclose(change.scattering @ w, solution[:m], rtol=1e-11)


def test_a_lossless_feed_conserves_power() -> None:
    s = passive_s(3, 5)
    change = connect(s, Z0_OHM, Feed(lossless_s(4, 9), 4, np.full(9, Z0_OHM)))
    into_array = change.transform.conj().T @ accepted_power(s) @ change.transform
    np.testing.assert_allclose(accepted_power(change.scattering), into_array, atol=1e-12)


def test_a_lossy_feed_keeps_what_the_array_does_not_get() -> None:
    s = passive_s(3, 5)
    change = connect(s, Z0_OHM, Feed(passive_s(5, 9, 0.9), 4, np.full(9, Z0_OHM)))
    into_array = change.transform.conj().T @ accepted_power(s) @ change.transform
    lost = np.linalg.eigvalsh(accepted_power(change.scattering) - into_array)
    assert lost[0] > 0.01


def test_a_matching_network_obeys_kirchhoff_with_coupled_ports() -> None:
    # Nodal analysis: Thevenin sources 2√(2 Z0) w behind Z0 + jX, shunt jB at the ports, V = Z I.
    z = loop_array()
    s = z_to_s(z, Z0_OHM)
    x, b = np.array([-600.0, -700.0, 400.0, -550.0]), np.array([1e-3, 0.9e-3, -1e-3, 1.2e-3])
    blocks = [
        cascade(series_two_port(1j * xc, Z0_OHM), shunt_two_port(1j * bc, Z0_OHM))
        for xc, bc in zip(x, b, strict=True)
    ]
    change = connect(s, Z0_OHM, feed_of_blocks(blocks, Z0_OHM))
    w = np.array([1.0, 1j, -0.5, 0.2 - 0.7j])
    source = 1 / (Z0_OHM + 1j * x)
    volts = np.linalg.solve(np.linalg.inv(z) + np.diag(1j * b + source), source * 2 * np.sqrt(2 * Z0_OHM) * w)
    found = np.sqrt(2 * Z0_OHM) * (np.eye(4) + s) @ change.transform @ w
    np.testing.assert_allclose(found, volts, rtol=1e-10)


def test_terminated_ports_obey_ohm_and_the_others_keep_their_waves() -> None:
    z = loop_array(5)
    s = z_to_s(z, Z0_OHM)
    capacitor = series_rlc(FREQUENCY_HZ, r_ohm=0.4, c_f=3.3e-12)
    tank = parallel_rlc(FREQUENCY_HZ, r_ohm=5e3, l_h=20e-9, c_f=10e-12)
    change = terminate(s, Z0_OHM, {1: capacitor, 3: tank})
    assert change.transform.shape == (5, 3)
    np.testing.assert_allclose(change.transform[[0, 2, 4]], np.eye(3), atol=1e-12)
    w = np.array([1.0, 0.5j, -1.0])
    a = change.transform @ w
    volts, amps = np.sqrt(Z0_OHM) * (a + s @ a), (a - s @ a) / np.sqrt(Z0_OHM)
    np.testing.assert_allclose(volts, z @ amps, rtol=1e-10)
    np.testing.assert_allclose(volts[[1, 3]], -np.array([capacitor, tank]) * amps[[1, 3]], rtol=1e-10)


def test_opens_and_shorts_give_the_rows_of_z_and_of_y() -> None:
    # Closed form: with all others open the input impedance of port 0 is Z_00, shorted it is 1/Y_00.
    z = loop_array(3)
    s = z_to_s(z, Z0_OHM)
    opened = terminate(s, Z0_OHM, {1: np.inf, 2: np.inf}).scattering
    shorted = terminate(s, Z0_OHM, {1: 0.0, 2: 0.0}).scattering
    np.testing.assert_allclose(s_to_z(opened, Z0_OHM), z[:1, :1], rtol=1e-10)
    np.testing.assert_allclose(s_to_z(shorted, Z0_OHM), 1 / np.linalg.inv(z)[:1, :1], rtol=1e-10)


def test_elements_agree_with_the_lumped_elements_of_scikit_rf() -> None:
    media = skrf.media.DefinedGammaZ0(skrf.Frequency.from_f([FREQUENCY_HZ], unit="hz"), z0=Z0_OHM)
    capacitor = series_rlc(FREQUENCY_HZ, c_f=4.7e-12)
    inductor = series_rlc(FREQUENCY_HZ, l_h=33e-9)
    np.testing.assert_allclose(series_two_port(capacitor, Z0_OHM), media.capacitor(4.7e-12).s[0], rtol=1e-9)
    np.testing.assert_allclose(
        shunt_two_port(1 / inductor, Z0_OHM), media.shunt_inductor(33e-9).s[0], rtol=1e-9
    )
    both = media.capacitor(4.7e-12) ** media.shunt_inductor(33e-9)
    found = cascade(series_two_port(capacitor, Z0_OHM), shunt_two_port(1 / inductor, Z0_OHM))
    np.testing.assert_allclose(found, both.s[0], rtol=1e-9)


def test_a_tank_resonates_where_thomson_says() -> None:
    # Closed form: f = 1/(2π√(LC)); lossless, the impedance is infinite, with a resistor it is R.
    l_h, c_f = 25e-9, 10e-12
    f = 1 / (2 * np.pi * np.sqrt(l_h * c_f))
    assert abs(parallel_rlc(f, l_h=l_h, c_f=c_f)) > 1e12
    assert parallel_rlc(f, r_ohm=3e3, l_h=l_h, c_f=c_f) == pytest.approx(3e3)
    assert series_rlc(f, 0.5, l_h, c_f) == pytest.approx(0.5, abs=1e-9)


def test_moving_the_plane_delays_each_wave_once_and_its_echo_twice() -> None:
    # Closed form: a late by βl, S' = T S T.
    s, phase = passive_s(7, 3), np.array([0.1, 0.5, -0.2])
    change = shift_reference_plane(s, Z0_OHM, phase)
    t = np.diag(np.exp(-1j * phase))
    np.testing.assert_allclose(change.transform, t, atol=1e-14)
    np.testing.assert_allclose(change.scattering, t @ s @ t, atol=1e-14)


def test_port_powers_add_up_and_single_ones_may_be_negative() -> None:
    s = passive_s(8, 4)
    parts = port_powers(s)
    np.testing.assert_allclose(parts.sum(axis=0), accepted_power(s), atol=1e-14)
    w = np.array([1.0, 0, 0, 0])
    assert np.vdot(w, parts[0] @ w).real == pytest.approx(1 - abs(s[0, 0]) ** 2)
    assert np.vdot(w, parts[1] @ w).real == pytest.approx(-(abs(s[1, 0]) ** 2))


def test_a_feed_of_another_impedance_or_port_count_is_refused() -> None:
    s, feed = passive_s(1, 3), passive_s(2, 6)
    with pytest.raises(InputError, match="renormalise"):
        connect(s, 75.0, Feed(feed, 3, np.full(6, Z0_OHM)))
    with pytest.raises(InputError, match="4 ports towards the array, the array has 3"):
        connect(s, Z0_OHM, Feed(feed, 2, np.full(6, Z0_OHM)))
    with pytest.raises(InputError, match="none is left to drive"):
        terminate(s, Z0_OHM, dict.fromkeys(range(3), 50.0))
    with pytest.raises(InputError, match="numbered 0 to 2"):
        terminate(s, Z0_OHM, {3: 50.0})


def test_an_active_termination_is_refused() -> None:
    with pytest.raises(InputError, match="passive"):
        reflection(-5.0 + 3j, Z0_OHM)


def test_a_resonance_without_loss_has_no_solution() -> None:
    # An open array on a shunt-open through: the wave runs round for ever.
    with pytest.raises(InputError, match="lossless resonance"):
        connect(np.array([[1.0]]), Z0_OHM, Feed(np.array([[0, 0], [0, 1.0]]), 1, np.full(2, Z0_OHM)))
