"""The floating-point proof of semidefiniteness against exact rational arithmetic.

Reference: Python's fractions; criterion after S. M. Rump, BIT Numer Math 2006;46:433-452.
"""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from proof_cases import exact_combination, exactly_semidefinite

from vop.hermitian import pack, unpack
from vop.kernels.proof_psd import certify, shift_bound


def _certify(
    target: np.ndarray, columns: np.ndarray, weights: np.ndarray, extra: np.ndarray | None = None
) -> tuple[bool, float]:
    """Whether Σ w C + E ⪰ T is proved, and the margin; packed float32 rows."""
    n = round(len(target) ** 0.5)
    proved = np.zeros(1, dtype=np.bool_)
    margin, _ = certify(
        target[None],
        np.zeros(n * n) if extra is None else extra,
        columns,
        np.array([0, len(columns)], dtype=np.int64),
        np.arange(len(columns)),
        weights,
        n,
        proved,
    )
    return bool(proved[0]), margin


def _exact(
    target: np.ndarray, columns: np.ndarray, weights: np.ndarray, extra: np.ndarray, shift: float = 0.0
) -> bool:
    terms = [(Fraction(-1), unpack(target)), (Fraction(1), unpack(extra))]
    terms += [(Fraction(float(w)), unpack(c)) for w, c in zip(weights, columns, strict=True)]
    return exactly_semidefinite(*exact_combination(terms, Fraction(shift)))


def _singular(rng: np.random.Generator, n: int, rank: int) -> np.ndarray:
    """A Gram matrix (n, n) of small Gaussian integers of the given rank, exact."""
    v = rng.integers(-9, 10, (rank, n)) + 1j * rng.integers(-9, 10, (rank, n))
    return v.conj().T @ v


def _factorises(a: np.ndarray) -> bool:
    """Whether LAPACK's unshifted Cholesky factorisation runs through, in double precision."""
    try:
        np.linalg.cholesky(a)
    except np.linalg.LinAlgError:
        return False
    return True


def _double_is_proved(a: np.ndarray) -> bool:
    """Whether a Hermitian matrix of double precision is proved semidefinite, as E with C = T = 0."""
    nothing = np.zeros(a.size, dtype=np.float32)
    return _certify(nothing, nothing[None], np.ones(1), pack(a))[0]


def test_singular_matrices_made_indefinite_by_one_unit_in_the_last_place_are_never_proved() -> None:
    rng = np.random.default_rng(0)
    fooled = 0
    for case in range(400):
        n = 2 + case % 5
        a = _singular(rng, n, n - 1) / 3.0
        i = case % n
        a[i, i] = np.nextafter(a[i, i].real, 0.0)
        if exactly_semidefinite(*exact_combination([(Fraction(1), a)])):
            continue
        fooled += _factorises(a)
        assert not _double_is_proved(a)
    # The test can fail: an unshifted factorisation takes some of these for positive definite.
    assert fooled > 10


def test_semidefinite_matrices_above_the_bound_are_proved_at_the_same_sizes() -> None:
    rng = np.random.default_rng(0)
    for case in range(100):
        n = 2 + case % 5
        a = _singular(rng, n, n - 1) / 3.0
        a += 1e-13 * np.trace(a).real * np.eye(n)
        assert exactly_semidefinite(*exact_combination([(Fraction(1), a)]))
        assert _double_is_proved(a)


@settings(max_examples=150, deadline=None)
@given(
    n=st.integers(1, 5),
    terms=st.integers(1, 6),
    seed=st.integers(0, 2**32 - 1),
    closeness=st.integers(8, 56),
    sign=st.sampled_from([-1.0, 1.0]),
    exponent=st.integers(-30, 30),
)
def test_what_is_proved_is_true_and_margins_are_true_near_the_boundary(
    n: int, terms: int, seed: int, closeness: int, sign: float, exponent: int
) -> None:
    rng = np.random.default_rng(seed)
    v = rng.normal(size=(terms, n, n)) + 1j * rng.normal(size=(terms, n, n))
    columns = (pack(v.conj().swapaxes(1, 2) @ v) * 2.0**exponent).astype(np.float32)
    units = rng.multinomial(2**20, np.full(terms, 1 / terms)).astype(float)
    weights = units * 2.0**-20
    mixture = np.tensordot(weights, unpack(columns), 1)
    # The mixture less its own least eigenvector's share, give or take 2^-closeness of it.
    values, vectors = np.linalg.eigh(mixture)
    low = vectors[:, 0]
    extra = pack(-values[0] * np.outer(low, low.conj()) * (1 + sign * 2.0**-closeness))
    target = np.zeros(n * n, dtype=np.float32)
    proved, margin = _certify(target, columns, weights, extra)
    assert _exact(target, columns, weights, extra) or not proved
    if proved:
        assert margin >= 0
        assert _exact(target, columns, weights, extra, margin)
    if closeness < 20:
        assert proved == (sign < 0)


@pytest.mark.parametrize("n", [1, 2, 8, 16])
def test_whatever_is_positive_by_more_than_the_bound_is_proved(n: int) -> None:
    # Completeness: λmin (numpy) above 1e-12 of the size is enough, so that the bound is no tolerance.
    rng = np.random.default_rng(n)
    for _ in range(30):
        v = rng.normal(size=(n, n)) + 1j * rng.normal(size=(n, n))
        q, _ = np.linalg.qr(v)
        a = (q * np.geomspace(1e-6, 1, n)) @ q.conj().T
        column, target = pack(a, np.float32), np.zeros(n * n, dtype=np.float32)
        least = np.linalg.eigvalsh(unpack(column))[0]
        proved, margin = _certify(target, column[None], np.ones(1))
        assert proved == (least > 1e-12)
        if proved:
            assert 0.95 * least < margin < least * (1 + 1e-6)


def test_the_bound_is_of_the_size_that_rounding_has() -> None:
    # For n = 8 and unit trace: some tens of u, not some thousands, and never below n u.
    bound = shift_bound(1.0, 2.0, 8, 2.0)
    assert 8 * 2.0**-53 < bound < 1000 * 2.0**-53


def test_extra_term_counts_with_its_own_rounding() -> None:
    n = 4
    target, column = pack(3.0 * np.eye(n), np.float32), pack(2.0 * np.eye(n), np.float32)
    for excess, wanted in ((1e-12, True), (2.0**-52, False), (0.0, False), (-1e-12, False)):
        extra = pack((1.0 + excess) * np.eye(n))
        assert _certify(target, column[None], np.ones(1), extra)[0] == wanted


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("where", ["target", "column", "extra"])
def test_numbers_that_are_none_are_never_proved(value: float, where: str) -> None:
    n = 3
    for entry in range(n * n):
        rows = {
            "target": pack(np.eye(n), np.float32),
            "column": pack(4 * np.eye(n), np.float32),
            "extra": np.zeros(n * n),
        }
        rows[where][entry] = value
        assert not _certify(rows["target"], rows["column"][None], np.ones(1), rows["extra"])[0]


def test_a_matrix_covers_itself_although_the_difference_is_singular() -> None:
    a = pack(_singular(np.random.default_rng(3), 4, 2), np.float32)
    assert _certify(a, a[None], np.ones(1)) == (True, 0.0)
    altered = a.copy()
    altered[2] = np.nextafter(altered[2], np.float32(np.inf))
    assert not _certify(altered, a[None], np.ones(1))[0]
