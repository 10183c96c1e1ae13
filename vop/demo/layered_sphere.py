"""A layered lossy sphere and short current elements outside it: Maxwell's equations in closed form.

Time factor e^{+jωt}. The dyadic Green's function in vector spherical harmonics (e.g. C.-T. Tai, Dyadic
Green Functions in Electromagnetic Theory, ch. 10; L.-W. Li et al., IEEE Trans Microwave Theory Tech
1994;42:2302) with M and N as in Bohren & Huffman, Absorption and Scattering of Light by Small
Particles, ch. 4; both quoted from memory, and checked by the tests against boundary conditions, the
free-space dipole, reciprocity, power balance and the Mie series. Seen from an element on the polar axis
only the orders m = 0 (its radial part) and |m| = 1 (its tangential part) are excited.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from scipy.constants import epsilon_0, mu_0

from vop.demo.radial import outgoing, regular
from vop.errors import InputError
from vop.kernels.layered_sphere import sum_harmonics
from vop.parallel import map_chunks
from vop.progress import Progress, silent

#: What the harmonics that are left out may amount to, relative to the field of an element at that radius.
TOLERANCE = 1e-7
#: Radii (of voxels, say) per task; only the balance between threads depends on it.
_RADII = 16


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
    """S short straight current elements.

    position_m : (S, 3), from the centre of the sphere. moment : (S, 3) complex, current times length, A·m.
    """

    position_m: np.ndarray
    moment: np.ndarray

    def distance_m(self) -> np.ndarray:
        """(S,) from the centre of the sphere."""
        return np.linalg.norm(self.position_m, axis=1)

    def frames(self) -> np.ndarray:
        """(S, 3, 3): rows are local axes x, y, z with z through the element."""
        z = self.position_m / self.distance_m()[:, None]
        helper = np.where(np.abs(z[:, :1]) < 0.6, [[1.0, 0.0, 0.0]], [[0.0, 1.0, 0.0]])
        x = np.cross(helper, z)
        x /= np.linalg.norm(x, axis=1, keepdims=True)
        return np.stack([x, np.cross(z, x), z], axis=1)


def degrees_needed(ratio: np.ndarray | float, tolerance: float = TOLERANCE) -> np.ndarray:
    """Degree n after which a series like Σ n² ratioⁿ (a dipole's field) lacks less than ``tolerance``.

    ratio : radius of the point over that of the source, below 1; any shape. Some degrees are added
    because low ones are waves rather than near fields.
    """
    decay = -np.log(np.asarray(ratio, dtype=np.float64))
    n = -np.log(tolerance) / decay
    # The tail is about (1 + n·decay)² times the last power; three rounds settle n to within a degree.
    for _ in range(3):
        n = (-np.log(tolerance) + 2 * np.log1p(n * decay)) / decay
    return np.ceil(n).astype(np.int64) + 10


class Solution:
    """Radial functions of one sphere up to degree ``n_max``, and fields of elements around it.

    Sums end earlier where ``tolerance`` allows (see :func:`degrees_needed`).

    Everything is per unit regular amplitude that arrives at the surface r = R: outside, a radial function
    is (r/R)ⁿ ĵ_n(k₀r) + Γ_n (R/r)ⁿ⁺¹ ĥ_n(k₀r) in the notation of ``vop/demo/radial.py``.
    """

    def __init__(self, sphere: LayeredSphere, n_max: int, tolerance: float = TOLERANCE) -> None:
        self.sphere, self.n_max, self.tolerance = sphere, int(n_max), tolerance
        self.degrees = np.arange(1, self.n_max + 1)
        self.k = sphere.wave_numbers()
        inner = [0.0, *(layer.radius_m for layer in sphere.layers)]
        self._inner = np.array(inner[:-1])
        self._outer = np.array(inner[1:])
        parts = [self._polarisation(electric) for electric in (False, True)]
        #: (layers, 2, L): regular amplitude at each layer's outer radius, of M and of N.
        self._amplitude = np.stack([p[0] for p in parts], axis=1)
        #: (layers + 1, 2, L): Γ of each layer at its inner radius; the last is that of the whole sphere.
        self._gamma = np.stack([p[1] for p in parts], axis=1)

    @classmethod
    def around(cls, sphere: LayeredSphere, elements: Elements, tolerance: float = TOLERANCE) -> Solution:
        """With as many degrees as the closest element asks for."""
        nearest = float(elements.distance_m().min())
        _require_outside(sphere, nearest)
        return cls(sphere, int(degrees_needed(sphere.radius_m / nearest, tolerance)), tolerance)

    @property
    def reflection(self) -> np.ndarray:
        """Γ_n of the sphere for M and for N, (2, L) complex128."""
        return self._gamma[-1]

    def _polarisation(self, electric: bool) -> tuple[np.ndarray, np.ndarray]:
        """Amplitudes (layers, L) and Γ (layers + 1, L) of M, or of N where ``electric``.

        Across a boundary R and (rR)' continue for M; kR and (rR)'/k for N.
        """
        n, layers = self.degrees, len(self._outer)
        gamma = np.zeros((layers + 1, self.n_max), dtype=np.complex128)
        passed = np.empty((layers, self.n_max), dtype=np.complex128)
        for q, radius in enumerate(self._outer):
            here, there = self.k[q], self.k[q + 1]
            j, dj = regular(self.n_max, np.array([here * radius]))
            h, dh = outgoing(self.n_max, np.array([here * radius]))
            back = gamma[q] * (self._inner[q] / radius) ** (2 * n + 1)
            value, slope = j[0] + back * h[0], dj[0] + back * dh[0]
            if electric:
                value, slope = value * here / there, slope * there / here
            j, dj = regular(self.n_max, np.array([there * radius]))
            h, dh = outgoing(self.n_max, np.array([there * radius]))
            wanted = value * dh[0] - slope * h[0]
            gamma[q + 1] = (slope * j[0] - value * dj[0]) / wanted
            passed[q] = -wanted / (2 * n + 1)  # the Wronskian ĵ(xh)' − ĥ(xj)' is −(2n+1) in these scales
        amplitude = np.empty_like(passed)
        amplitude[-1] = 1 / passed[-1]
        for q in range(layers - 2, -1, -1):
            shrink = (self._outer[q] / self._outer[q + 1]) ** n
            amplitude[q] = amplitude[q + 1] * shrink / passed[q]
        return amplitude, gamma

    def inside_tables(self, radius_m: np.ndarray) -> np.ndarray:
        """Radial factors of :func:`sum_harmonics` at radii inside the sphere, (6, U, L) complex128."""
        out = np.empty((6, len(radius_m), self.n_max), dtype=np.complex128)
        radius = np.maximum(radius_m, 1e-9 * self.sphere.radius_m)  # the limit at the centre exists
        region = self.sphere.layer_of(radius)
        n = self.degrees
        for q in np.unique(region):
            here = region == q
            r, k, a, b = radius[here], self.k[q], self._inner[q], self._outer[q]
            grown = (r[:, None] / b) ** n
            value, slope = (f * grown for f in regular(self.n_max, k * r))
            rows = []
            if a > 0:
                h, dh = outgoing(self.n_max, k * r, a / r)
                back = (a / b) ** n * self._gamma[q][:, None, :]
                rows = [(value + g * h, slope + g * dh) for g in back]
            else:
                rows = [(value, slope)] * 2
            (m, dm), (e, de) = rows
            m, dm = m * self._amplitude[q, 0], dm * self._amplitude[q, 0]
            e, de = e * self._amplitude[q, 1], de * self._amplitude[q, 1]
            out[:, here] = self._tables(m, dm, e, de, k, r)
        return out

    def returned_tables(self, radius_m: np.ndarray) -> np.ndarray:
        """As :meth:`inside_tables`, outside: what the sphere sends back."""
        h, dh = self._outside(radius_m)
        m, e = self.reflection
        return self._tables(m * h, m * dh, e * h, e * dh, self.k[-1], radius_m)

    def _outside(self, radius_m: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        return outgoing(self.n_max, self.k[-1] * radius_m, self.sphere.radius_m / radius_m)

    def _tables(
        self, m: np.ndarray, dm: np.ndarray, e: np.ndarray, de: np.ndarray, k: complex, r: np.ndarray
    ) -> np.ndarray:
        kr = k * r[:, None]
        to_magnetic = 1j * k / (self.sphere.omega * mu_0)
        electric = [m, e / kr, de / kr]
        return np.array([*electric, to_magnetic * e, to_magnetic * m / kr, to_magnetic * dm / kr])

    def source_factors(self, elements: Elements) -> np.ndarray:
        """Factors of each element, (3, S, L): of M, of N along it, of N radially.

        −jωμ₀ times the free-space Green's dyadic, whose scalar part is jk₀ h_n(k₀r₀) j_n(k₀r) in each
        degree; j_n(k₀r) h_n(k₀r₀) = i/((2n+1) k₀R) · (r/R)ⁿ ĵ_n · (R/r₀)ⁿ⁺¹ ĥ_n.
        """
        distance = elements.distance_m()
        _require_outside(self.sphere, float(distance.min()))
        h, dh = self._outside(distance)
        return 1j * self._shape_source(h, dh, h, dh, distance)

    def _shape_source(
        self, m: np.ndarray, dm: np.ndarray, e: np.ndarray, de: np.ndarray, distance_m: np.ndarray
    ) -> np.ndarray:
        """(3, S, L) factors of elements from radial functions of M and N at their distances."""
        both = self.degrees * (self.degrees + 1)
        kr = self.sphere.k0 * distance_m[:, None]
        common = -self.sphere.omega * mu_0 / (4 * np.pi * self.sphere.radius_m * both)
        return np.array([common * m, common * de / kr, common * both * e / kr])

    def _power_modes(self, kind: str, r: np.ndarray) -> tuple[np.ndarray, ...]:
        """Weights of M and N, and radial functions m, (rm)', e, (re)' of sources at ``r``, whose weighted
        square is "absorbed" or "radiated" power.

        Per unit arriving amplitude a mode absorbs −Re T − |T|² and radiates |j + T·h|² in the usual
        terms (j_n, h_n, T = −icΓ); scaled, −Im Γ − c|Γ|² and c with c = X²ⁿ⁺¹/((2n+1)!!(2n−1)!!), X = k₀R.
        """
        n, surface = self.degrees, self.sphere.radius_m
        big = self.sphere.k0 * surface
        c = big * np.cumprod(big**2 / ((2 * n + 1) * (2 * n - 1)))
        h, dh = self._outside(r)
        gamma_m, gamma_e = self.reflection
        if kind == "absorbed":
            taken_m, taken_e = (-g.imag - c * np.abs(g) ** 2 for g in (gamma_m, gamma_e))
            return taken_m, taken_e, h, dh, h, dh
        grown = (r[:, None] / surface) ** n
        j, dj = (f * grown for f in regular(self.n_max, self.k[-1] * r))
        return c, c, j + gamma_m * h, dj + gamma_m * dh, j + gamma_e * h, dj + gamma_e * dh

    def field(
        self,
        elements: Elements,
        owner: np.ndarray,
        n_owners: int,
        points_m: np.ndarray,
        *,
        returned: bool = False,
        progress: Progress = silent,
    ) -> tuple[np.ndarray, np.ndarray]:
        """E (V/m) and H (A/m) of groups of elements at points, all inside or all outside the sphere.

        Parameters
        ----------
        owner : (S,) int, group of each element, below n_owners.
        points_m : (V, 3), from the centre of the sphere.
        returned : outside only: without the elements' own free-space field.

        Returns
        -------
        Two arrays (n_owners, 3, V) complex128, peak phasors.

        Raises
        ------
        InputError
            Where points lie on both sides of the surface, or an element inside the sphere.
        """
        points = np.asarray(points_m, dtype=np.float64)
        surface = self.sphere.radius_m
        within = np.linalg.norm(points, axis=1) <= surface
        source = self.source_factors(elements)
        if within.all() and not returned:
            return self._sum(elements, owner, n_owners, points, source, self.inside_tables, progress)
        if within.any():
            raise InputError("points should lie all inside or all outside the sphere")
        e, h = self._sum(elements, owner, n_owners, points, source, self.returned_tables, progress)
        if not returned:
            direct = free_space_field(self.sphere.k0, self.sphere.omega, elements, points)
            np.add.at(e, owner, direct[0])
            np.add.at(h, owner, direct[1])
        return e, h

    def power_matrix(self, kind: str, elements: Elements, owner: np.ndarray, n_owners: int) -> np.ndarray:
        """P, (n_owners, n_owners) Hermitian: currents I of the groups absorb or radiate IᴴPI watts.

        Closed form in the amplitudes of the solver's modes; no volume or surface is sampled.

        Parameters
        ----------
        kind : "absorbed" in the sphere or "radiated" to infinity.
        """
        distance = elements.distance_m()
        _require_outside(self.sphere, float(distance.min()))

        def tables(radius: np.ndarray) -> np.ndarray:
            w_m, w_e, *modes = self._power_modes(kind, radius)
            m, dm, e, de = (mode.conj() for mode in modes)
            return self._tables(w_m * m, w_m * dm, w_e * e, w_e * de, self.k[-1], radius)

        _, _, m, dm, e, de = self._power_modes(kind, distance)
        source = self._shape_source(m, dm, e, de, distance)
        seen, _ = self._sum(elements, owner, n_owners, elements.position_m, source, tables, silent)
        by_element = -0.5 * np.einsum("ia,dai->id", elements.moment.conj(), seen)
        matrix = np.zeros((n_owners, n_owners), dtype=np.complex128)
        np.add.at(matrix, owner, by_element)
        return 0.5 * (matrix + matrix.conj().T)

    def _sum(
        self,
        elements: Elements,
        owner: np.ndarray,
        n_owners: int,
        points: np.ndarray,
        source: np.ndarray,
        tables: Callable[[np.ndarray], np.ndarray],
        progress: Progress,
    ) -> tuple[np.ndarray, np.ndarray]:
        """Points of one radius share its table; radii that differ by rounding count as one."""
        radius, which = np.unique(np.round(np.linalg.norm(points, axis=1), 15), return_inverse=True)
        # Outer radii need more degrees: dealing them out like cards gives every task some of each.
        tasks = -(-len(radius) // _RADII)
        dealt = np.argsort(np.arange(len(radius)) % tasks, kind="stable")
        rank = np.empty_like(dealt)
        rank[dealt] = np.arange(len(radius))
        radius, which = radius[dealt], rank[which]
        order = np.argsort(which, kind="stable")
        first = np.searchsorted(which[order], np.arange(len(radius) + 1)).astype(np.int64)
        frames = elements.frames()
        moments = np.einsum("sab,sb->sa", frames, elements.moment).astype(np.complex128)
        owner = np.asarray(owner, dtype=np.int64)
        distance, surface = elements.distance_m(), self.sphere.radius_m
        out = np.zeros((2, n_owners, 3, len(points)), dtype=np.complex128)

        def work(a: int, b: int) -> None:
            r = radius[a:b]
            # Outside, the sphere's answer comes as if from the mirrored radius R²/r.
            ratio = np.minimum(r, surface**2 / np.maximum(r, surface)) / distance[:, None]
            orders = np.minimum(degrees_needed(np.maximum(ratio, 1e-9), self.tolerance), self.n_max)
            mine = order[first[a] : first[b]]
            part = np.zeros((2, n_owners, 3, len(mine)), dtype=np.complex128)
            table = np.ascontiguousarray(tables(r))
            offsets = first[a : b + 1] - first[a]
            sum_harmonics(points[mine], offsets, table, orders, source, frames, moments, owner, part)
            out[..., mine] = part

        map_chunks("demo: fields", len(radius), _RADII, work, progress)
        return out[0], out[1]


def _require_outside(sphere: LayeredSphere, nearest_m: float) -> None:
    if nearest_m <= sphere.radius_m:
        raise InputError(
            f"a current element lies inside the sphere: {nearest_m:g} m from the centre, "
            f"the radius is {sphere.radius_m:g} m"
        )


def free_space_field(
    k0: float, omega: float, elements: Elements, points_m: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """E (V/m) and H (A/m) of each element in free space, two (S, 3, V) complex128, peak (Hertzian dipole).

    With g = e^{−jkR}/(4πR): E = −jωμ0 (1 + ∇∇/k²) g·p and H = ∇g × p; any handbook of electromagnetics.
    """
    d = points_m[None, :, :] - elements.position_m[:, None, :]
    distance = np.linalg.norm(d, axis=2)
    unit = d / distance[..., None]
    moment = elements.moment[:, None, :]
    along = np.einsum("sva,sa->sv", unit, elements.moment)
    x = k0 * distance
    g = np.exp(-1j * x) / (4 * np.pi * distance)
    a = 1 - 1j / x - 1 / x**2
    b = -1 + 3j / x + 3 / x**2
    e = -1j * omega * mu_0 * g[..., None] * (a[..., None] * moment + (b * along)[..., None] * unit)
    slope = -(1j * k0 + 1 / distance) * g
    h = np.cross(slope[..., None] * unit, np.broadcast_to(moment, unit.shape))
    return np.moveaxis(e, 2, 1), np.moveaxis(h, 2, 1)
