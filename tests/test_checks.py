"""Power checks on import: passivity and the balance against the S-matrix."""

from __future__ import annotations

import numpy as np
import pytest
from conftest import random_matrices

from vop.checks import check_power
from vop.errors import InputError


def _scaled(largest: float) -> np.ndarray:
    p = random_matrices(np.random.default_rng(0), 1, 4, rank=4)[0]
    return p * largest / np.linalg.eigvalsh(p)[-1]


def test_a_passive_array_passes() -> None:
    checks = check_power(_scaled(0.99), "forward power")
    assert checks.absorbed_eigenvalues_w[-1] == pytest.approx(0.99)
    assert any("passivity: holds" in line for line in checks.lines)


def test_a_factor_of_two_from_rms_read_as_peak_is_refused_with_its_number() -> None:
    with pytest.raises(InputError, match=r"eigenvalue of 1\.6.*peak/rms"):
        check_power(2 * _scaled(0.8), "forward power")


def test_a_waiver_is_recorded_as_a_warning() -> None:
    checks = check_power(_scaled(1.1), "forward power", waiver="known calibration error")
    assert any("known calibration error" in text for text in checks.warnings)


def test_absorbing_more_than_s_lets_in_is_noticed() -> None:
    # A matched, uncoupled array accepts everything; with |S11|² = 0.75 it accepts a quarter.
    absorbed = 0.5 * np.eye(3, dtype=complex)
    quiet = check_power(absorbed, "forward power", np.zeros((3, 3)), account="radiated")
    assert not quiet.warnings
    loud = check_power(absorbed, "forward power", np.sqrt(0.75) * np.eye(3), account="radiated")
    assert loud.most_absorbed_beyond_accepted_w == pytest.approx(0.25)
    assert any("more than S lets in" in text for text in loud.warnings)


def test_power_that_nobody_accounts_for_is_an_open_warning() -> None:
    # The factor of ten that passivity does not see: 5 % absorbed where half is accepted.
    s = np.sqrt(0.5) * np.eye(2)
    checks = check_power(0.05 * np.eye(2, dtype=complex), "forward power", s)
    assert any("90 to 90 %" in text and "nobody has accounted" in text for text in checks.warnings)


def test_other_references_say_that_nothing_was_checked() -> None:
    checks = check_power(50 * _scaled(1.0), "port current")
    assert any("cannot be checked" in text for text in checks.warnings)
