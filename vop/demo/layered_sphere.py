"""A layered lossy sphere and short current elements outside it: Maxwell's equations in closed form.

Time factor e^{+jωt}. The dyadic Green's function in vector spherical harmonics (e.g. C.-T. Tai, Dyadic
Green Functions in Electromagnetic Theory, ch. 10; L.-W. Li et al., IEEE Trans Microwave Theory Tech
1994;42:2302) with M and N as in Bohren & Huffman, Absorption and Scattering of Light by Small
Particles, ch. 4; both quoted from memory, and checked by the tests against boundary conditions, the
free-space dipole, reciprocity, power balance and the Mie series. Seen from an element on the polar axis
only the orders m = 0 (its radial part) and |m| = 1 (its tangential part) are excited.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from scipy.constants import epsilon_0, mu_0
from scipy.special import spherical_jn, spherical_yn

from vop.errors import InputError
from vop.kernels.layered_sphere import sum_harmonics

#: Terms of the sum that are smaller than this, relative to the first, are left out.
_TERM = 1e-9


@dataclass(frozen=True)
class Layer:
    """One tissue up to ``radius_m`` from the centre."""

    name: str
    radius_m: float
    permittivity: float
    conductivity_s_m: float
    density_kg_m3: float


@dataclass(frozen=True)
class LayeredSphere:
    """Concentric layers, innermost first, in free space; all non-magnetic.

    Raises
    ------
    InputError
        Where the radii do not grow.
    """

    layers: tuple[Layer, ...]
    frequency_hz: float

    def __post_init__(self) -> None:
        radii = [layer.radius_m for layer in self.layers]
        if not radii or radii[0] <= 0 or any(b <= a for a, b in pairwise(radii)):
            raise InputError(f"radii of the layers should grow from the centre, got {radii}")

    @property
    def radius_m(self) -> float:
        """Outer radius."""
        return self.layers[-1].radius_m

    @property
    def omega(self) -> float:
        """Angular frequency, rad/s."""
        return 2 * np.pi * self.frequency_hz

    @property
    def k0(self) -> float:
        """Wave number of free space, rad/m."""
        return float(self.omega * np.sqrt(mu_0 * epsilon_0))

    def wave_numbers(self) -> np.ndarray:
        """Complex wave number of each layer and of free space, (layers + 1,), Im ≤ 0."""
        eps = [x.permittivity - 1j * x.conductivity_s_m / (self.omega * epsilon_0) for x in self.layers]
        return self.k0 * np.sqrt(np.array([*eps, 1.0], dtype=np.complex128))

    def layer_of(self, radius_m: np.ndarray) -> np.ndarray:
        """Index of the layer at each radius; len(layers) is free space."""
        return np.searchsorted([x.radius_m for x in self.layers], radius_m)


@dataclass(frozen=True, eq=False)
class Elements:
    """S short straight current elements outside the sphere.

    position_m : (S, 3). moment : (S, 3) complex, current times length, A·m, peak.
    """

    position_m: np.ndarray
    moment: np.ndarray

    def frames(self) -> np.ndarray:
        """(S, 3, 3): rows are local axes x, y, z with z through the element."""
        z = self.position_m / np.linalg.norm(self.position_m, axis=1, keepdims=True)
        helper = np.where(np.abs(z[:, :1]) < 0.6, [[1.0, 0.0, 0.0]], [[0.0, 1.0, 0.0]])
        x = np.cross(helper, z)
        x /= np.linalg.norm(x, axis=1, keepdims=True)
        return np.stack([x, np.cross(z, x), z], axis=1)


class Solution:
    """Radial functions of one sphere up to degree ``n_max``, and fields of elements around it."""

    def __init__(self, sphere: LayeredSphere, n_max: int) -> None:
        self.sphere, self.n_max = sphere, n_max
        self.degrees = np.arange(1, n_max + 1)
        self.k = sphere.wave_numbers()
        # Riccati functions u = rj and v = ry with their derivatives serve both polarisations: R = αj + βy.
        self._m = self._coefficients(magnetic=False)
        self._n = self._coefficients(magnetic=True)

    def _coefficients(self, magnetic: bool) -> np.ndarray:
        """(layers + 1, 2, L): α and β of each region, incident amplitude 1 outside.

        Across a boundary R and (rR)' are continuous for M; kR and (rR)'/k for N. The Wronskian
        r²(j y' − j' y) = 1/k gives α and β of the next region.
        """
        layers = self.sphere.layers
        out = np.zeros((len(self.k), 2, self.n_max), dtype=np.complex128)
        out[0, 0] = 1.0
        for q, layer in enumerate(layers):
            r, k, k_next = layer.radius_m, self.k[q], self.k[q + 1]
            value, slope = self._radial(out[q], k, np.array([r]))
            value, slope = value[0], slope[0]
            if magnetic:
                value, slope = value * k / k_next, slope * k_next / k
            j, dj, y, dy = self._bessel(k_next, np.array([r]))
            # value = αj + βy, slope = αdj + βdy with d = (r·)'; j dy − y dj = 1/(k r).
            w = k_next * r
            out[q + 1, 0] = w * (value * dy[0] - slope * y[0])
            out[q + 1, 1] = w * (slope * j[0] - value * dj[0])
            # Rescale as we go: the incident amplitude may leave the range of floating point.
            out[: q + 2] /= np.abs(out[q + 1, 0]) + np.abs(out[q + 1, 1] * y[0] / j[0])
        # α j + β y = (α − ... ) outside: incident j plus outgoing h = j − jy.
        incident = out[-1, 0] - 1j * out[-1, 1]
        return out / incident

    def _bessel(self, k: complex, r: np.ndarray) -> tuple[np.ndarray, ...]:
        """j, (rj)', y, (ry)' at each radius and degree, (U, L)."""
        x = k * r[:, None]
        n = self.degrees[None, :]
        j, y = spherical_jn(n, x), spherical_yn(n, x)
        # (x f_n)' = x f_(n-1) − n f_n, for both. Near the centre y overflows, and is not used there.
        with np.errstate(invalid="ignore", over="ignore"):
            return j, x * spherical_jn(n - 1, x) - n * j, y, x * spherical_yn(n - 1, x) - n * y

    def _radial(self, coefficients: np.ndarray, k: complex, r: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        j, dj, y, dy = self._bessel(k, r)
        alpha, beta = coefficients
        # In the core β = 0, and y may overflow near the centre.
        with np.errstate(invalid="ignore", over="ignore"):
            value = alpha * j + np.where(beta == 0, 0, beta * y)
            slope = alpha * dj + np.where(beta == 0, 0, beta * dy)
        return value, slope

    def surface_reflection(self) -> np.ndarray:
        """T h_n(k0 R) of the sphere's radius R for M and for N, (2, L), per unit incident amplitude.

        The outgoing amplitude T itself underflows at high degrees; its product with h does not.
        """
        r, k = self.sphere.radius_m, self.k[-1]
        j = self._bessel(k, np.array([r]))[0][0]
        inside = self.k[-2]
        m = self._radial(self._m[-2], inside, np.array([r]))[0][0]
        n = self._radial(self._n[-2], inside, np.array([r]))[0][0] * inside / k
        return np.array([m - j, n - j])

    def tables(self, radius_m: np.ndarray, magnetic: bool = False) -> np.ndarray:
        """Radial factors of :func:`sum_harmonics` inside the sphere, (3, U, L)."""
        out = np.zeros((3, len(radius_m), self.n_max), dtype=np.complex128)
        region = self.sphere.layer_of(radius_m)
        for q in np.unique(region):
            here = region == q
            r, k = radius_m[here], self.k[q]
            m, dm = self._radial(self._m[q], k, r)
            n, dn = self._radial(self._n[q], k, r)
            out[:, here] = self._factors(m, dm, n, dn, k, r, magnetic)
        return out

    def scattered_tables(self, radius_m: np.ndarray) -> np.ndarray:
        """As :meth:`tables`, electric, outside: the part that the sphere sends back."""
        j, dj, y, dy = self._bessel(self.k[-1], radius_m)
        j0, _, y0, _ = self._bessel(self.k[-1], np.array([self.sphere.radius_m]))
        h, dh = (j - 1j * y) / (j0 - 1j * y0), (dj - 1j * dy) / (j0 - 1j * y0)
        t_m, t_n = self.surface_reflection()
        return self._factors(t_m * h, t_m * dh, t_n * h, t_n * dh, self.k[-1], radius_m, False)

    def _factors(
        self,
        m: np.ndarray,
        dm: np.ndarray,
        n: np.ndarray,
        dn: np.ndarray,
        k: complex,
        r: np.ndarray,
        magnetic: bool,
    ) -> np.ndarray:
        kr = k * r[:, None]
        if not magnetic:
            return np.array([m, n / kr, dn / kr])
        return np.array([n, m / kr, dm / kr]) * (1j * k / (self.sphere.omega * mu_0))

    def source(self, elements: Elements) -> np.ndarray:
        """Factors of each element, (3, S, L): of M, of N along it, of N radially."""
        distance = np.linalg.norm(elements.position_m, axis=1)
        if (distance <= self.sphere.radius_m).any():
            raise InputError("a current element lies inside the sphere")
        j, dj, y, dy = self._bessel(self.k[-1], distance)
        h, dh = j - 1j * y, dj - 1j * dy
        n = self.degrees
        kr = self.sphere.k0 * distance[:, None]
        common = -self.sphere.omega * mu_0 * self.sphere.k0 * (2 * n + 1) / (4 * np.pi * n * (n + 1))
        return np.array([common * h, common * dh / kr, common * n * (n + 1) * h / kr])

    def field(
        self,
        elements: Elements,
        owner: np.ndarray,
        n_owners: int,
        points_m: np.ndarray,
        *,
        magnetic: bool = False,
        scattered: bool = False,
    ) -> np.ndarray:
        """E (V/m) or H (A/m) of groups of elements at points.

        Parameters
        ----------
        owner : (S,) int, group of each element; n_owners groups.
        points_m : (V, 3), inside the sphere; outside where ``scattered``.
        scattered : only what the sphere sends back, at points outside.

        Returns
        -------
        (n_owners, 3, V) complex128, peak phasors.
        """
        radius, which = np.unique(np.round(np.linalg.norm(points_m, axis=1), 12), return_inverse=True)
        tables = self.scattered_tables(radius) if scattered else self.tables(radius, magnetic)
        distance = np.linalg.norm(elements.position_m, axis=1)
        reach = self.sphere.radius_m**2 / radius if scattered else radius
        ratio = np.minimum(reach[None, :] / distance[:, None], 0.999999)
        orders = np.ceil(np.log(_TERM) / np.log(ratio)).astype(np.int64) + 10
        frames = elements.frames()
        local = np.einsum("sab,sb->sa", frames, elements.moment)
        out = np.zeros((n_owners, 3, len(points_m)), dtype=np.complex128)
        sum_harmonics(
            np.ascontiguousarray(points_m, dtype=np.float64),
            which.astype(np.int64),
            np.nan_to_num(tables),
            np.minimum(orders, self.n_max),
            self.source(elements),
            frames,
            local.astype(np.complex128),
            np.asarray(owner, dtype=np.int64),
            magnetic,
            out,
        )
        return out


def free_space_field(k0: float, omega: float, elements: Elements, points_m: np.ndarray) -> np.ndarray:
    """E of each element in free space, (S, 3, V) complex128, V/m, peak (Hertzian dipole).

    E = −jωμ0 (1 + ∇∇/k²) g·p, g = e^{−jkR}/(4πR); any handbook of electromagnetics.
    """
    d = points_m[None, :, :] - elements.position_m[:, None, :]
    distance = np.linalg.norm(d, axis=2)
    unit = d / distance[..., None]
    along = np.einsum("sva,sa->sv", unit, elements.moment)
    x = k0 * distance
    g = np.exp(-1j * x) / (4 * np.pi * distance)
    a = 1 - 1j / x - 1 / x**2
    b = -1 + 3j / x + 3 / x**2
    e = a[..., None] * elements.moment[:, None, :] + (b * along)[..., None] * unit
    return np.moveaxis(-1j * omega * mu_0 * g[..., None] * e, 2, 1)
