"""The demo's physics: Maxwell's equations at work, against closed forms and conservation laws."""

from __future__ import annotations

import numpy as np
import pytest
from mie import MieSphere
from scipy.constants import epsilon_0, mu_0

from vop.demo import DemoArray, Elements, Layer, LayeredSphere, Solution
from vop.demo.array import decoupled_currents, resistance_matrix
from vop.demo.layered_sphere import free_space_field
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
    return Solution(LAYERED, 90)


def _split(field: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    normal = np.einsum("sav,va->sv", field, DIRECTIONS)
    return normal, field - normal[:, None, :] * DIRECTIONS.T


@pytest.mark.parametrize("boundary", [0.040, 0.045, 0.064, 0.070])
def test_boundary_conditions_hold_between_layers(solution: Solution, boundary: float) -> None:
    # Source: Maxwell's equations; tangential E and H and the normal parts of (ε − jσ/ω)E and H continue.
    inner, outer = boundary * (1 - 1e-10), boundary * (1 + 1e-10)
    k = solution.k[LAYERED.layer_of(np.array([inner, outer]))]
    for magnetic in (False, True):
        a, b = (solution.field(ELEMENTS, OWNER, 3, r * DIRECTIONS, magnetic=magnetic) for r in (inner, outer))
        (a_n, a_t), (b_n, b_t) = _split(a), _split(b)
        assert np.abs(a_t - b_t).max() < 1e-7 * np.abs(a).max()
        factors = (1.0, 1.0) if magnetic else k**2 / k[0] ** 2
        assert np.abs(a_n * factors[0] - b_n * factors[1]).max() < 1e-7 * np.abs(a_n * factors[0]).max()


def test_tangential_field_continues_through_the_surface() -> None:
    # Outside, the field is the free-space field of the elements plus what the sphere sends back.
    solution = Solution(LAYERED, 110)
    r = LAYERED.radius_m
    a = solution.field(ELEMENTS, OWNER, 3, r * (1 - 1e-10) * DIRECTIONS)
    b = solution.field(ELEMENTS, OWNER, 3, r * (1 + 1e-10) * DIRECTIONS, scattered=True)
    b = b + free_space_field(LAYERED.k0, LAYERED.omega, ELEMENTS, r * (1 + 1e-10) * DIRECTIONS)
    assert np.abs(_split(a)[1] - _split(b)[1]).max() < 1e-5 * np.abs(a).max()


def test_a_sphere_of_vacuum_leaves_the_hertzian_dipole() -> None:
    # Source: field of a short current element, any handbook of electromagnetics.
    vacuum = LayeredSphere((Layer("a", 0.05, 1, 0, 1), Layer("b", 0.073, 1, 0, 1)), FREQUENCY)
    points = RNG.uniform(0.004, 0.065, (40, 1)) * DIRECTIONS
    found = Solution(vacuum, 90).field(ELEMENTS, OWNER, 3, points)
    wanted = free_space_field(vacuum.k0, vacuum.omega, ELEMENTS, points)
    assert np.abs(found - wanted).max() < 1e-6 * np.abs(wanted).max()


def test_faraday_s_law_holds_inside(solution: Solution) -> None:
    # Source: Maxwell's equations, by central differences: ∇×E = −jωμ0 H for e^{+jωt}.
    at, h = np.array([[0.01, 0.02, 0.03]]), 1e-5
    slope = np.array(
        [
            (solution.field(ELEMENTS, OWNER, 3, at + h * e) - solution.field(ELEMENTS, OWNER, 3, at - h * e))
            / (2 * h)
            for e in np.eye(3)
        ]
    )[..., 0]
    curl = np.stack(
        [slope[1, :, 2] - slope[2, :, 1], slope[2, :, 0] - slope[0, :, 2], slope[0, :, 1] - slope[1, :, 0]], 1
    )
    magnetic = solution.field(ELEMENTS, OWNER, 3, at, magnetic=True)[..., 0]
    assert np.allclose(curl, -1j * LAYERED.omega * mu_0 * magnetic, rtol=1e-5, atol=1e-5 * np.abs(curl).max())


def test_elements_see_each_other_reciprocally(solution: Solution) -> None:
    # Source: Lorentz reciprocity, p_i·E_j(r_i) = p_j·E_i(r_j), of what the sphere sends back.
    back = solution.field(ELEMENTS, OWNER, 3, ELEMENTS.position_m, scattered=True)
    mutual = np.einsum("ia,jai->ij", ELEMENTS.moment, back)
    assert np.allclose(mutual, mutual.T, rtol=1e-8, atol=1e-10 * np.abs(mutual).max())


def test_power_into_the_sphere_is_absorbed_there(solution: Solution) -> None:
    # Source: Poynting's theorem; the flux through the surface (Gauss by trapezoid nodes) against the
    # volume integral of σ|E|²/2, shell by shell, by Gauss quadrature over each layer's radius.
    nodes, weights = np.polynomial.legendre.leggauss(40)
    phi = 2 * np.pi * np.arange(80) / 80
    sine = np.sqrt(1 - nodes**2)
    unit = np.stack(
        [np.outer(sine, np.cos(phi)), np.outer(sine, np.sin(phi)), np.outer(nodes, np.ones(80))], -1
    ).reshape(-1, 3)
    solid = np.repeat(weights, 80) * 2 * np.pi / 80
    far = Elements(1.6 * ELEMENTS.position_m, ELEMENTS.moment)  # smooth enough for these nodes
    surface = LAYERED.radius_m * (1 - 1e-12)
    e = solution.field(far, OWNER, 3, surface * unit)
    h = solution.field(far, OWNER, 3, surface * unit, magnetic=True)
    inward = -0.5 * np.einsum("sav,va->sv", np.cross(e, h.conj(), axis=1), unit).real @ solid * surface**2
    absorbed = np.zeros(3)
    low = 0.0
    radial, radial_weight = np.polynomial.legendre.leggauss(8)
    for layer in LAYERED.layers:
        for x, w in zip(radial, radial_weight, strict=True):
            r = 0.5 * (layer.radius_m + low) + 0.5 * (layer.radius_m - low) * x
            density = (
                0.5 * layer.conductivity_s_m * (np.abs(solution.field(far, OWNER, 3, r * unit)) ** 2).sum(1)
            )
            absorbed += density @ solid * r**2 * w * 0.5 * (layer.radius_m - low)
        low = layer.radius_m
    assert np.allclose(inward, absorbed, rtol=1e-5)


def test_radiated_and_absorbed_power_are_what_the_currents_give_off() -> None:
    # Source: energy conservation; radiated power from the far field of currents plus returned field.
    array = DemoArray(n_channels=3, n_elements=3, length_m=0.06)
    elements, owner = array.elements()
    solution = Solution(array.sphere(), 70)
    r = resistance_matrix(solution, elements, owner)
    nodes, weights = np.polynomial.legendre.leggauss(30)
    phi = 2 * np.pi * np.arange(60) / 60
    sine = np.sqrt(1 - nodes**2)
    unit = np.stack(
        [np.outer(sine, np.cos(phi)), np.outer(sine, np.sin(phi)), np.outer(nodes, np.ones(60))], -1
    ).reshape(-1, 3)
    solid = np.repeat(weights, 60) * 2 * np.pi / 60
    distance = 1e4
    k0, omega = solution.sphere.k0, solution.sphere.omega
    e = solution.field(elements, owner, 3, distance * unit, scattered=True)
    direct = free_space_field(k0, omega, elements, distance * unit)
    np.add.at(e, owner, direct)
    eta = np.sqrt(mu_0 / epsilon_0)
    radiated = np.einsum("iav,jav,v->ij", e.conj(), e, solid).real * distance**2 / eta
    surface = array.radius_m * (1 - 1e-12)
    fine_nodes, fine_weights = np.polynomial.legendre.leggauss(120)
    fine_phi = 2 * np.pi * np.arange(240) / 240
    fine_sine = np.sqrt(1 - fine_nodes**2)
    unit = np.stack(
        [
            np.outer(fine_sine, np.cos(fine_phi)),
            np.outer(fine_sine, np.sin(fine_phi)),
            np.outer(fine_nodes, np.ones(240)),
        ],
        -1,
    ).reshape(-1, 3)
    solid = np.repeat(fine_weights, 240) * 2 * np.pi / 240
    inside = solution.field(elements, owner, 3, surface * unit)
    h = solution.field(elements, owner, 3, surface * unit, magnetic=True)
    absorbed = -np.array(
        [[np.einsum("av,va->v", np.cross(inside[j], h[i].conj(), axis=0), unit) @ solid for j in range(3)]
         for i in range(3)]
    ) * surface**2  # fmt: skip
    absorbed = 0.5 * (absorbed + absorbed.conj().T).real
    assert np.allclose(radiated + absorbed, r, rtol=1e-3, atol=1e-4 * np.abs(r).max())


def test_a_distant_element_absorbs_as_the_mie_series_says() -> None:
    # Source: Bohren & Huffman ch. 4, absorption efficiency of a sphere in a plane wave (tests/mie.py).
    radius, permittivity, sigma = 0.06, 40.0, 0.5
    sphere = LayeredSphere((Layer("all", radius, permittivity, sigma, 1000.0),), FREQUENCY)
    solution = Solution(sphere, 25)
    distance = 60.0
    element = Elements(np.array([[0.0, 0.0, distance]]), np.array([[1.0, 0.0, 0.0]], complex))
    incident = np.abs(free_space_field(sphere.k0, sphere.omega, element, np.zeros((1, 3)))).max()
    points = 0.9 * radius * DIRECTIONS
    found = solution.field(element, np.zeros(1, int), 1, points)[0] / incident
    mie = MieSphere(radius, permittivity, sigma, FREQUENCY)
    # The wave comes down the z axis here and up the z axis in the book: turn about the x axis.
    wanted = mie.electric(points * [1, -1, -1]) * np.array([[1], [-1], [-1]])
    phase = np.vdot(wanted, found) / abs(np.vdot(wanted, found))
    assert np.abs(found - phase * wanted).max() < 5e-3 * np.abs(wanted).max()


def test_the_decoupling_network_makes_forward_power_accepted_power() -> None:
    r = np.array([[4.0, 0.5], [0.5, 6.0]])
    t = decoupled_currents(r)
    assert np.allclose(0.5 * t.T @ r @ t, np.eye(2))


def test_an_element_inside_the_sphere_is_refused(solution: Solution) -> None:
    inside = Elements(np.array([[0.0, 0.0, 0.01]]), np.ones((1, 3), complex))
    with pytest.raises(InputError, match="inside the sphere"):
        solution.source(inside)


def test_layers_that_do_not_grow_are_refused() -> None:
    with pytest.raises(InputError, match="should grow"):
        LayeredSphere((Layer("a", 0.05, 1, 0, 1), Layer("b", 0.05, 1, 0, 1)), FREQUENCY)
