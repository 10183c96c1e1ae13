"""The demo's physics: Maxwell's equations at work, against closed forms and conservation laws.

The bounds are a few times the residuals that were seen when the tests were written.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from mie import MieSphere
from scipy.constants import epsilon_0, mu_0
from scipy.special import spherical_jn, spherical_yn

from vop.demo import Elements, Layer, LayeredSphere, Solution
from vop.demo.layered_sphere import degrees_needed, free_space_field
from vop.demo.radial import outgoing, regular
from vop.errors import InputError

FREQUENCY = 297.2e6
LAYERED = LayeredSphere(
    (
        Layer("core", 0.040, 6.0, 0.03, 1030.0),
        Layer("shell", 0.045, 13.0, 0.08, 1900.0),
        Layer("thick", 0.064, 58.0, 0.77, 1090.0),
        Layer("lean", 0.070, 5.6, 0.04, 911.0),
        Layer("thin", 0.073, 50.0, 0.64, 1109.0),
    ),
    FREQUENCY,
)
RNG = np.random.default_rng(0)
ELEMENTS = Elements(
    np.array([[0.02, 0.03, 0.08], [0.0, 0.0, 0.09], [-0.06, 0.06, -0.02]]),
    RNG.normal(size=(3, 3)) + 1j * RNG.normal(size=(3, 3)),
)
OWNER = np.arange(3)
DIRECTIONS = RNG.normal(size=(40, 3))
DIRECTIONS /= np.linalg.norm(DIRECTIONS, axis=1, keepdims=True)


@pytest.fixture(scope="module")
def solution() -> Solution:
    return Solution.around(LAYERED, ELEMENTS, 1e-10)


def _split(field: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    normal = np.einsum("sav,va->sv", field, DIRECTIONS)
    return normal, field - normal[:, None, :] * DIRECTIONS.T


def _directions(count: int) -> tuple[np.ndarray, np.ndarray]:
    """Unit vectors (V, 3) and solid angles (V,): Gauss nodes by even steps in longitude, which
    integrates harmonics up to degree 2·count − 1 exactly."""
    nodes, weights = np.polynomial.legendre.leggauss(count)
    phi = np.pi * np.arange(2 * count) / count
    sine, one = np.sqrt(1 - nodes**2), np.ones(2 * count)
    unit = np.stack([np.outer(sine, np.cos(phi)), np.outer(sine, np.sin(phi)), np.outer(nodes, one)], -1)
    return unit.reshape(-1, 3), np.repeat(weights, 2 * count) * np.pi / count


def test_scaled_bessel_functions_are_scipy_s() -> None:
    # Source: scipy.special; its y_n loses digits below the real axis, where j_n is large and h_n small.
    n = np.arange(1, 26)
    x = np.array([0.01, 0.5, 3.0 - 0.1j, 2.0 - 1.0j, 5.0 - 2.0j, 14.0 - 0.5j])
    double = np.cumprod(2.0 * n - 1)
    j = spherical_jn(n, x[:, None])
    h = j - 1j * spherical_yn(n, x[:, None])
    found_j, found_dj = regular(25, x)
    found_h, found_dh = outgoing(25, x)
    assert np.allclose(found_j * x[:, None] ** n / (double * (2 * n + 1)), j, rtol=1e-12)
    assert np.allclose(1j * found_h * double / x[:, None] ** (n + 1), h, rtol=1e-9)
    # The Wronskian, Abramowitz & Stegun 10.1.6, holds far below the real axis, too.
    x = np.array([0.1 - 3j, 9.0 - 6.0j, 20.0])
    (j, dj), (h, dh) = regular(60, x), outgoing(60, x)
    assert np.allclose(j * dh - h * dj, -(2 * np.arange(1, 61) + 1), rtol=1e-9)
    assert np.isfinite(found_dj).all()
    assert np.isfinite(found_dh).all()


def test_three_hundred_degrees_stay_in_range() -> None:
    # j_300 of a deep voxel is 1e-900 in the usual scale; the scaled functions tend to 1.
    value, slope = regular(300, np.array([0.05 + 0j]))
    out, out_slope = outgoing(300, np.array([0.05 + 0j]))
    assert np.allclose([value[0, -1], out[0, -1]], 1, rtol=1e-5)
    assert np.allclose([slope[0, -1], out_slope[0, -1]], [301, -300], rtol=1e-5)


@pytest.mark.parametrize("boundary", [layer.radius_m for layer in LAYERED.layers])
def test_boundary_conditions_hold_at_every_boundary(solution: Solution, boundary: float) -> None:
    # Source: Maxwell's equations; tangential E and H and the normal parts of (ε − jσ/ω)E and H continue.
    inner, outer = boundary * (1 - 1e-12), boundary * (1 + 1e-12)
    k = solution.k[LAYERED.layer_of(np.array([inner, outer]))]
    assert k[0] != k[1]
    before = solution.field(ELEMENTS, OWNER, 3, inner * DIRECTIONS)
    after = solution.field(ELEMENTS, OWNER, 3, outer * DIRECTIONS)
    # At the surface itself the closed-form field of the elements meets its series, cut at 1e-10.
    bound = 1e-10 if boundary < LAYERED.radius_m else 1e-9
    for a, b, weights in zip(before, after, (k**2 / k[0] ** 2, (1.0, 1.0)), strict=True):
        (a_n, a_t), (b_n, b_t) = _split(a), _split(b)
        scale = np.abs(a).max(axis=(1, 2))
        assert (np.abs(a_t - b_t).max(axis=(1, 2)) < bound * scale).all()
        assert (np.abs(a_n * weights[0] - b_n * weights[1]).max(axis=1) < bound * scale).all()


def test_a_sphere_of_vacuum_leaves_the_hertzian_dipole() -> None:
    # Source: field of a short current element, any handbook of electromagnetics.
    vacuum = LayeredSphere((Layer("a", 0.05, 1, 0, 1), Layer("b", 0.073, 1, 0, 1)), FREQUENCY)
    points = np.vstack([np.zeros(3), RNG.uniform(0, 0.072, (40, 1)) * DIRECTIONS])
    found = Solution.around(vacuum, ELEMENTS, 1e-10).field(ELEMENTS, OWNER, 3, points)
    wanted = free_space_field(vacuum.k0, vacuum.omega, ELEMENTS, points)
    for a, b in zip(found, wanted, strict=True):
        assert (np.abs(a - b).max(axis=(1, 2)) < 1e-9 * np.abs(b).max(axis=(1, 2))).all()


def test_the_free_space_field_obeys_faraday_and_ampere() -> None:
    # Source: Maxwell's equations in vacuum, by central differences.
    def both(p: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        return free_space_field(LAYERED.k0, LAYERED.omega, ELEMENTS, p)

    _assert_maxwell(both, np.array([[0.15, -0.1, 0.12]]), 1.0, 3e-5)


@pytest.mark.parametrize("radius", [0.02, 0.043, 0.055, 0.067, 0.0715])
def test_maxwell_s_equations_hold_in_every_layer(solution: Solution, radius: float) -> None:
    # Source: ∇×E = −jωμ₀H and ∇×H = jω(ε − jσ/ω)E for e^{+jωt}, by central differences.
    def both(p: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        return solution.field(ELEMENTS, OWNER, 3, p)

    k = solution.k[LAYERED.layer_of(np.array([radius]))][0]
    _assert_maxwell(both, radius * DIRECTIONS[:1], (k / LAYERED.k0) ** 2, 3e-5)


def _assert_maxwell(
    both: Callable[[np.ndarray], tuple[np.ndarray, np.ndarray]],
    at: np.ndarray,
    permittivity: complex,
    bound: float,
) -> None:
    step = 1e-5
    slope = []
    for axis in np.eye(3):
        up, down = both(at + step * axis), both(at - step * axis)
        slope.append([(a - b)[..., 0] / (2 * step) for a, b in zip(up, down, strict=True)])
    d = np.array(slope)  # axis, field, element, component
    curl = np.stack(
        [
            d[1, ..., 2] - d[2, ..., 1],
            d[2, ..., 0] - d[0, ..., 2],
            d[0, ..., 1] - d[1, ..., 0],
        ],
        -1,
    )
    e, h = (f[..., 0] for f in both(at))
    wanted = np.array([-1j * LAYERED.omega * mu_0 * h, 1j * LAYERED.omega * epsilon_0 * permittivity * e])
    assert (np.abs(curl - wanted).max(axis=(1, 2)) < bound * np.abs(d).max(axis=(0, 2, 3))).all()


def test_layers_of_one_tissue_are_one_sphere() -> None:
    # Homogeneous limit: a boundary between equals is none. The single sphere is checked against Mie below.
    tissue = (58.0, 0.77, 1090.0)
    radii = (0.03, 0.05, 0.052, 0.073)
    many = LayeredSphere(tuple(Layer(str(r), r, *tissue) for r in radii), FREQUENCY)
    one = LayeredSphere((Layer("all", 0.073, *tissue),), FREQUENCY)
    points = RNG.uniform(0, 0.073, (40, 1)) * DIRECTIONS
    a, b = (Solution.around(s, ELEMENTS).field(ELEMENTS, OWNER, 3, points)[0] for s in (many, one))
    assert np.abs(a - b).max() < 1e-12 * np.abs(b).max()


def test_elements_see_each_other_reciprocally(solution: Solution) -> None:
    # Source: Lorentz reciprocity, p_i·E_j(r_i) = p_j·E_i(r_j), of what the sphere sends back.
    back, _ = solution.field(ELEMENTS, OWNER, 3, ELEMENTS.position_m, returned=True)
    mutual = np.einsum("ia,jai->ij", ELEMENTS.moment, back)
    assert np.allclose(mutual, mutual.T, rtol=1e-9, atol=1e-12 * np.abs(mutual).max())


def test_a_distant_element_does_what_the_mie_series_says() -> None:
    # Source: Bohren & Huffman ch. 4, a sphere in a plane wave (tests/mie.py): internal field, and power.
    radius, permittivity, sigma = 0.06, 40.0, 0.5
    sphere = LayeredSphere((Layer("all", radius, permittivity, sigma, 1000.0),), FREQUENCY)
    solution = Solution(sphere, 25)
    distance = 300.0
    element = Elements(np.array([[0.0, 0.0, distance]]), np.array([[1.0, 0.0, 0.0]], complex))
    owner = np.zeros(1, int)
    incident = np.abs(free_space_field(sphere.k0, sphere.omega, element, np.zeros((1, 3)))[0]).max()
    points = 0.9 * radius * DIRECTIONS
    found = solution.field(element, owner, 1, points)[0][0] / incident
    mie = MieSphere(radius, permittivity, sigma, FREQUENCY)
    # The wave comes down the z axis here and up the z axis in the book: turn about the x axis.
    wanted = mie.electric(points * [1, -1, -1]) * np.array([[1], [-1], [-1]])
    phase = np.vdot(wanted, found) / abs(np.vdot(wanted, found))
    assert np.abs(found - phase * wanted).max() < 1e-3 * np.abs(wanted).max()
    absorbed = solution.power_matrix("absorbed", element, owner, 1)[0, 0] / incident**2
    assert absorbed == pytest.approx(mie.absorbed_power_w(), rel=2e-3)


FAR = Elements(1.5 * ELEMENTS.position_m, ELEMENTS.moment)  # smooth enough for the nodes of the next tests


def test_absorbed_power_is_the_flux_through_the_surface_and_the_loss_in_the_layers() -> None:
    # Source: Poynting's theorem, mutual terms of the three elements included.
    solution = Solution.around(LAYERED, FAR)
    found = solution.power_matrix("absorbed", FAR, OWNER, 3)
    unit, solid = _directions(45)
    surface = LAYERED.radius_m * (1 - 1e-12)
    e, h = solution.field(FAR, OWNER, 3, surface * unit)
    cross = np.cross(e[None], h[:, None].conj(), axis=2)  # [i, j] = E_j × H_i*
    flux = -np.einsum("ijav,va,v->ij", cross, unit, solid) * surface**2
    assert np.allclose(found, 0.25 * (flux + flux.conj().T), rtol=1e-7, atol=1e-8 * np.abs(found).max())
    lost, low = np.zeros((3, 3), complex), 0.0
    radial, weights = np.polynomial.legendre.leggauss(8)
    for layer in LAYERED.layers:
        half = 0.5 * (layer.radius_m - low)
        for x, w in zip(radial, weights, strict=True):
            r = low + half * (1 + x)
            e, _ = solution.field(FAR, OWNER, 3, r * unit)
            shell = np.einsum("iav,jav,v->ij", e.conj(), e, solid)
            lost += 0.5 * layer.conductivity_s_m * shell * r**2 * w * half
        low = layer.radius_m
    assert np.allclose(found, lost, rtol=1e-7, atol=1e-8 * np.abs(found).max())


def test_radiated_power_is_that_of_the_far_field(solution: Solution) -> None:
    # Source: |E|²/2η₀ over a distant sphere; the field falls short of the far one by 1e-4 there.
    unit, solid = _directions(24)
    e, _ = solution.field(ELEMENTS, OWNER, 3, 1e5 * unit)
    far = np.einsum("iav,jav,v->ij", e.conj(), e, solid) * 1e10 / (2 * np.sqrt(mu_0 / epsilon_0))
    found = solution.power_matrix("radiated", ELEMENTS, OWNER, 3)
    assert np.allclose(found, far, rtol=1e-6, atol=1e-6 * np.abs(found).max())


def test_radiated_and_absorbed_power_are_what_the_currents_give_off(solution: Solution) -> None:
    # Source: energy conservation, −½ Re ∫ E·J* on the elements. The field of a short element at itself has
    # the real part −ωμ₀k₀/6π per unit moment (radiation resistance of the Hertzian dipole).
    apart = Elements(ELEMENTS.position_m, np.eye(3, dtype=complex))
    own = -LAYERED.omega * mu_0 * LAYERED.k0 / (6 * np.pi)
    with np.errstate(divide="ignore", invalid="ignore"):
        direct, _ = free_space_field(LAYERED.k0, LAYERED.omega, ELEMENTS, apart.position_m)
    direct[OWNER, :, OWNER] = own * ELEMENTS.moment
    back, _ = solution.field(ELEMENTS, OWNER, 3, ELEMENTS.position_m, returned=True)
    given = -0.5 * np.einsum("ia,jai->ij", ELEMENTS.moment.conj(), back + direct)
    given = 0.5 * (given + given.conj().T)
    parts = [solution.power_matrix(kind, ELEMENTS, OWNER, 3) for kind in ("absorbed", "radiated")]
    assert np.abs(sum(parts) - given).max() < 1e-10 * np.abs(given).max()
    for part in parts:
        assert np.linalg.eigvalsh(part)[0] > 0


def test_a_lossless_sphere_absorbs_nothing() -> None:
    glass = LayeredSphere((Layer("a", 0.05, 4, 0, 1), Layer("b", 0.073, 2, 0, 1)), FREQUENCY)
    solution = Solution.around(glass, ELEMENTS)
    absorbed, radiated = (solution.power_matrix(k, ELEMENTS, OWNER, 3) for k in ("absorbed", "radiated"))
    assert np.abs(absorbed).max() < 1e-12 * np.abs(radiated).max()


@pytest.mark.parametrize("tolerance", [1e-4, 1e-7])
def test_what_the_series_leaves_out_is_as_small_as_promised(tolerance: float) -> None:
    # Reference: the same sum asked for 1e-14, which goes hundreds of degrees further.
    near = Elements(np.array([[0.0, 0.0, 0.078]]), np.array([[0.3, 0.1, 1.0]], complex))
    owner = np.zeros(1, int)
    tilt = np.linspace(0, 0.4, 30)
    unit = np.stack([np.sin(tilt), np.zeros(30), np.cos(tilt)], 1)
    coarse = Solution.around(LAYERED, near, tolerance)
    fine = Solution.around(LAYERED, near, 1e-14)
    assert fine.n_max > coarse.n_max + 90
    for radius in (0.0729, 0.071, 0.055, 0.02):
        rough = coarse.field(near, owner, 1, radius * unit)
        exact = fine.field(near, owner, 1, radius * unit)
        for a, b in zip(rough, exact, strict=True):
            assert np.abs(a - b).max() < tolerance * np.abs(b).max()


def test_degrees_grow_with_closeness() -> None:
    assert degrees_needed(0.5) < degrees_needed(0.9) < degrees_needed(0.95)


def test_an_element_inside_the_sphere_is_refused(solution: Solution) -> None:
    inside = Elements(np.array([[0.0, 0.0, 0.01]]), np.ones((1, 3), complex))
    with pytest.raises(InputError, match="inside the sphere"):
        Solution.around(LAYERED, inside)
    with pytest.raises(InputError, match="inside the sphere"):
        solution.field(inside, np.zeros(1, int), 1, DIRECTIONS)


def test_points_on_both_sides_of_the_surface_are_refused(solution: Solution) -> None:
    with pytest.raises(InputError, match="all inside or all outside"):
        solution.field(ELEMENTS, OWNER, 3, np.array([[0, 0, 0.01], [0, 0.5, 0]]))


def test_layers_that_do_not_grow_are_refused() -> None:
    with pytest.raises(InputError, match="should grow"):
        LayeredSphere((Layer("a", 0.05, 1, 0, 1), Layer("b", 0.05, 1, 0, 1)), FREQUENCY)
