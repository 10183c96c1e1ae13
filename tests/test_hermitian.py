"""Packing of Hermitian matrices, against numpy's own linear algebra."""

from __future__ import annotations

import numpy as np
import pytest
from conftest import random_matrices
from hypothesis import given, settings
from hypothesis import strategies as st

from vop import hermitian
from vop.errors import InputError


@pytest.mark.parametrize("n", [1, 2, 3, 8, 16])
def test_packing_and_unpacking_give_back_the_same_bits(n: int) -> None:
    q = random_matrices(np.random.default_rng(n), 20, n)
    q = 0.5 * (q + q.conj().swapaxes(1, 2))
    assert np.array_equal(hermitian.unpack(hermitian.pack(q)), q)


def test_kernel_helpers_agree_with_the_array_functions() -> None:
    q = random_matrices(np.random.default_rng(0), 1, 5)[0]
    row = hermitian.pack(q)
    dense = np.zeros((5, 5), complex)
    hermitian.unpack_row(row, 5, dense)
    assert np.array_equal(dense, hermitian.unpack(row))
    again = np.zeros(25)
    hermitian.pack_row(dense, 5, again)
    assert np.array_equal(again, row)


def test_packed_functional_of_a_covariance_is_the_trace_of_the_product() -> None:
    # Reference: numpy's trace and matrix product.
    rng = np.random.default_rng(1)
    q, x = random_matrices(rng, 10, 6), random_matrices(rng, 10, 6)
    wanted = np.trace(q @ x, axis1=1, axis2=2).real
    found = np.einsum("vp,vp->v", hermitian.pack(q), hermitian.pack_covariance(x))
    assert np.allclose(found, wanted, rtol=1e-13)


def test_packed_functional_of_an_excitation_keeps_the_phase_sense() -> None:
    # wᴴQw for a Q with an imaginary part: a lost conjugate changes the value.
    rng = np.random.default_rng(2)
    q = random_matrices(rng, 1, 4, rank=1)[0]
    w = rng.normal(size=4) + 1j * rng.normal(size=4)
    found = hermitian.pack(q) @ hermitian.pack_excitations(w)
    assert found == pytest.approx((w.conj() @ q @ w).real, rel=1e-13)
    assert abs(found - (w @ q @ w.conj()).real) > 1e-3 * found


@settings(max_examples=60, deadline=None)
@given(n=st.integers(1, 9), seed=st.integers(0, 10**6), exponent=st.integers(-30, 30))
def test_outward_rounding_never_makes_a_matrix_smaller(n: int, seed: int, exponent: int) -> None:
    # Reference: exact differences (float32 minus float64 is exact here) and Gershgorin's theorem
    # evaluated with fractions, so that no rounding hides a violation.
    from fractions import Fraction

    q = random_matrices(np.random.default_rng(seed), 3, n) * 10.0**exponent
    before = hermitian.unpack(hermitian.pack(q))
    after = hermitian.unpack(hermitian.round_outward(hermitian.pack(q)))
    for b, a in zip(before, after, strict=True):
        for i in range(n):
            room = Fraction(float(a[i, i].real)) - Fraction(float(b[i, i].real))
            for j in range(n):
                if j != i:
                    room -= abs(Fraction(float(a[i, j].real)) - Fraction(float(b[i, j].real)))
                    room -= abs(Fraction(float(a[i, j].imag)) - Fraction(float(b[i, j].imag)))
            assert room >= 0
    assert np.abs(after - before).max() <= 4 * n * 2.0**-24 * np.abs(before).max()


def test_a_width_that_is_no_square_is_refused() -> None:
    with pytest.raises(InputError, match="63"):
        hermitian.channels_from_width(63)
