"""References of excitation: closed forms, circuit theory, and the intervals that an error of S leaves."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from network_cases import Z0_OHM, loop_array, passive_s

from vop.errors import ConventionError, InputError
from vop.network import (
    accepted_power,
    accepted_power_interval,
    connect,
    feed_of_blocks,
    from_forward_power,
    s_to_z,
    series_two_port,
    to_forward_power,
    z_to_s,
)

EACH = [
    ("port voltage", {"phasor": "peak"}),
    ("port voltage", {"phasor": "rms"}),
    ("port current", {"phasor": "peak"}),
    ("port current", {"phasor": "rms"}),
    ("accepted power", {"accepted": "total"}),
    ("accepted power", {"accepted": "each port alone"}),
    ("forward power", {}),
]


@pytest.mark.parametrize(("quantity", "how"), EACH)
def test_there_and_back_is_nothing(quantity: str, how: dict[str, str]) -> None:
    s = passive_s(1, 4)
    there = from_forward_power(quantity, s, Z0_OHM, **how)
    back = to_forward_power(quantity, s, Z0_OHM, **how)
    np.testing.assert_allclose(there.transform @ back.transform, np.eye(4), atol=1e-12)
    assert there.reference.quantity == quantity
    assert back.reference.quantity == "forward power"


def test_a_matched_port_at_one_watt_has_ten_volts_peak() -> None:
    # Closed form: P = V²/(2 Z0) for a peak phasor: 1 W in 50 Ω is 10 V peak, 7.071 V rms, 0.2 A peak.
    s = np.zeros((1, 1))
    volts = to_forward_power("port voltage", s, 50.0, phasor="peak").transform
    assert volts[0, 0] == pytest.approx(10.0)
    assert to_forward_power("port voltage", s, 50.0, phasor="rms").transform[0, 0] == pytest.approx(50**0.5)
    assert to_forward_power("port current", s, 50.0, phasor="peak").transform[0, 0] == pytest.approx(0.2)


def test_port_voltages_and_currents_obey_the_impedance_matrix_and_carry_the_accepted_power() -> None:
    # Circuit theory: V = Z I (Z by scikit-rf), and ½ Re(VᴴI) of peak phasors is the accepted power.
    skrf = pytest.importorskip("skrf")
    s = passive_s(2, 4)
    v = to_forward_power("port voltage", s, Z0_OHM, phasor="peak").transform
    i = to_forward_power("port current", s, Z0_OHM, phasor="peak").transform
    np.testing.assert_allclose(v, skrf.network.s2z(s[None], Z0_OHM)[0] @ i, rtol=1e-10)
    power = 0.25 * (v.conj().T @ i + i.conj().T @ v)
    np.testing.assert_allclose(power, accepted_power(s), atol=1e-12)


def test_one_volt_at_a_port_means_the_others_are_shorted() -> None:
    # One entry 1, the rest 0: ports 1 and 2 are held at zero volts, as stated in the reference.
    s = z_to_s(loop_array(3), Z0_OHM)
    change = from_forward_power("port voltage", s, Z0_OHM, phasor="peak")
    a = change.transform[:, 0]
    volts = np.sqrt(2 * Z0_OHM) * (a + s @ a)
    np.testing.assert_allclose(volts, [1, 0, 0], atol=1e-12)
    assert change.reference.other_ports == "short-circuited"
    assert change.reference.phasor == "peak"


def test_accepted_power_in_total_is_the_norm_of_the_new_excitation() -> None:
    s = passive_s(3, 4)
    t = from_forward_power("accepted power", s, Z0_OHM, accepted="total").transform
    np.testing.assert_allclose(t.conj().T @ accepted_power(s) @ t, np.eye(4), atol=1e-12)


def test_accepted_power_port_by_port_is_not_the_sum() -> None:
    # TRAP: with coupling, watts accepted by each port alone do not add up for all together.
    s = passive_s(3, 4)
    t = from_forward_power("accepted power", s, Z0_OHM, accepted="each port alone").transform
    accepted = t.conj().T @ accepted_power(s) @ t
    np.testing.assert_allclose(accepted.diagonal(), 1, rtol=1e-12)
    assert np.abs(accepted - np.eye(4)).max() > 0.05


def test_peak_or_rms_and_the_kind_of_accepted_power_have_no_default() -> None:
    with pytest.raises(ConventionError, match="factor of two"):
        from_forward_power("port voltage", passive_s(1, 2), Z0_OHM)
    with pytest.raises(ConventionError, match="'total' or 'each port alone'"):
        from_forward_power("accepted power", passive_s(1, 2), Z0_OHM)
    with pytest.raises(ConventionError, match="not known"):
        from_forward_power("port charge", passive_s(1, 2), Z0_OHM)


def test_a_port_that_accepts_nothing_cannot_be_a_reference() -> None:
    with pytest.raises(InputError, match="nothing to refer to"):
        from_forward_power("accepted power", np.eye(2), Z0_OHM, accepted="total")
    with pytest.raises(InputError, match="does not exist"):
        from_forward_power("port current", np.eye(2), Z0_OHM, phasor="peak")


def _errors(n: int, delta: float, count: int) -> np.ndarray:
    rng = np.random.default_rng(9)
    d = rng.normal(size=(count, n, n)) + 1j * rng.normal(size=(count, n, n))
    d[: count // 2, :, 1:] = 0  # half of them of rank one, which reach furthest
    return delta * d / np.linalg.norm(d, 2, axis=(1, 2))[:, None, None]


@pytest.mark.parametrize(("quantity", "how"), EACH[:6:2])
def test_no_error_of_s_within_its_accuracy_leaves_the_interval(quantity: str, how: dict[str, str]) -> None:
    s, delta = passive_s(4, 3, 0.9), 0.004
    nominal = from_forward_power(quantity, s, Z0_OHM, accuracy=delta, **how)
    assert nominal.factor is not None
    assert nominal.factor.low < 1 < nominal.factor.high
    rng = np.random.default_rng(5)
    for error in _errors(3, delta, 200):
        w = rng.normal(size=3) + 1j * rng.normal(size=3)
        if quantity == "accepted power":
            a = nominal.transform @ w
            ratio = np.vdot(w, w).real / np.vdot(a, accepted_power(s + error) @ a).real
        else:
            true = from_forward_power(quantity, s + error, Z0_OHM, **how).transform @ w
            ratio = np.linalg.norm(true) ** 2 / np.linalg.norm(nominal.transform @ w) ** 2
        assert nominal.factor.low * (1 - 1e-12) <= ratio <= nominal.factor.high * (1 + 1e-12)


def test_the_interval_of_one_port_is_attained() -> None:
    # Closed form for one port: a/V ∝ 1/(1 + s), so that the worst error points towards s = −1.
    s, delta = np.array([[-0.9 + 0j]]), 0.01
    factor = from_forward_power("port voltage", s, Z0_OHM, phasor="rms", accuracy=delta).factor
    assert factor is not None
    assert factor.high == pytest.approx((0.1 / 0.09) ** 2)
    assert factor.low == pytest.approx((0.1 / 0.11) ** 2)


def test_accepted_power_interval_of_one_port_is_its_closed_form_and_absorbed_power_lifts_it() -> None:
    s, w = np.array([[0.99 + 0j]]), np.ones(1)
    interval = accepted_power_interval(s, 0.005, w)
    assert interval.low == pytest.approx(1 - 0.995**2)
    assert interval.nominal == pytest.approx(1 - 0.99**2)
    assert interval.high == pytest.approx(1 - 0.985**2)
    lifted = accepted_power_interval(s, 0.02, w, absorbed=np.array([[0.015]]))
    assert lifted.low == pytest.approx(0.015)
    assert accepted_power_interval(s, 0.02, w).low == 0


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 2**32 - 1), size=st.floats(0.5, 0.999), delta=st.floats(0, 0.05))
def test_the_true_accepted_power_is_never_outside(seed: int, size: float, delta: float) -> None:
    rng = np.random.default_rng(seed)
    s = passive_s(seed, 3, size)
    w = rng.normal(size=3) + 1j * rng.normal(size=3)
    true = s + _errors(3, delta, 2)[seed % 2]
    if np.linalg.norm(true, 2) > 1:
        return  # no passive array
    power = np.vdot(w, accepted_power(true) @ w).real
    interval = accepted_power_interval(s, delta, w)
    assert interval.low - 1e-12 <= power <= interval.high + 1e-12


def test_an_interval_wider_than_a_factor_of_two_is_refused_with_its_ends() -> None:
    s = np.array([[0.99 + 0j]])
    with pytest.raises(InputError, match=r"more than a factor of two.*too inaccurate"):
        from_forward_power("accepted power", s, Z0_OHM, accepted="each port alone", accuracy=0.01)
    from_forward_power("accepted power", s, Z0_OHM, accepted="each port alone", accuracy=0.002)


def test_the_error_of_s_through_a_network_is_never_larger_than_stated() -> None:
    # A series capacitor that nearly matches: both ‖a‖² and S' must stay within what is returned.
    s, delta = z_to_s(loop_array(3, 50.0, 0.02), Z0_OHM), 2e-4
    x = -s_to_z(s, Z0_OHM).diagonal().imag
    feed = feed_of_blocks([series_two_port(1j * v, Z0_OHM) for v in x], Z0_OHM)
    change = connect(s, Z0_OHM, feed, accuracy=delta)
    assert change.factor is not None
    assert change.accuracy is not None
    moved = 0.0
    for error in _errors(3, delta, 200):
        true = connect(s + error, Z0_OHM, feed)
        moved = max(moved, float(np.linalg.norm(true.scattering - change.scattering, 2)))
        gain = np.linalg.svd(true.transform @ np.linalg.inv(change.transform), compute_uv=False) ** 2
        assert change.factor.low <= gain[-1]
        assert gain[0] <= change.factor.high
    assert 0.1 * change.accuracy < moved <= change.accuracy
