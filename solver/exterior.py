"""The sound outside an envelope: Kirchhoff-Helmholtz integral, far field, directivity, radiated power.

    p(x) = int [ p dG/dn - G dp/dn ] dS,   G = e^{-ikr} / (4 pi r),   n out of the envelope (into the outside)
    p(x) -> F(d) e^{-ik|x|} / |x|,   with e^{ik d.y} / (4 pi) in the place of G     (x and y from the centre)

A ground plane adds the images of G with its sign. The flux is not differentiated: G is projected onto the trace functions,
g = B^{-1} int N G dS, and int G dp/dn dS = -g^T A_out u is what the infinite elements themselves balance; it converges as
fast as energies do.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
import scipy.sparse.linalg as spla
from numpy.polynomial.chebyshev import chebvander
from numpy.polynomial.legendre import leggauss
from scipy.spatial import cKDTree

from murmesh.solver.case.load import IncidentField
from murmesh.solver.envelope import Envelope
from murmesh.solver.faces import FacePoints

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Kernel = Callable[[Floats, Floats], tuple[Complex, Complex]]
"""Points (q, 3) and normals (q, 3) of the surface -> G and dG/dn, both (k, q)."""

_DEGREE, _NEAR_DEGREE = 10, 30
"""Added degree of the rule; degree where a point lies nearer to the surface than the largest face is long."""
_TIERS = (0.3, 0.6)
"""Distances to the surface over its longest edge at which a coarser rule is enough for the field."""
_SURE = 0.07
"""Height over the longest edge above which a plane that touches the surface tells on which side of it a point lies."""
_PAIRS, _FEW = 2_000_000, 50
"""Pairs of a point and a point of the surface, and points at the finest rule, that are looked at together."""


def point_kernel(x: Floats, k: complex) -> Kernel:
    """G and dG/dn of points x (k, 3): e^{-ikr} / (4 pi r)."""

    def of(y: Floats, n: Floats) -> tuple[Complex, Complex]:
        away = y[None] - x[:, None]
        r = np.linalg.norm(away, axis=2)
        g = np.exp(-1j * k * r) / (4 * np.pi * r)
        along = np.einsum("kqd,qd->kq", away, n) / r
        return g, -(1j * k + 1.0 / r) * g * along

    return of


def _summed(x: Floats, y: Floats, n: Floats, k: complex, pressure: Complex, flux: Complex) -> Complex:
    """sum_q dG/dn P_q + G F_q (m, r) at points x (m, 3); pairs in single precision, which is 1e-5 of the largest term."""
    away = [y[:, i].astype(np.float32) - x[:, i].astype(np.float32)[:, None] for i in range(3)]
    r = np.sqrt(away[0] ** 2 + away[1] ** 2 + away[2] ** 2)
    along = sum(part * n[:, i].astype(np.float32) for i, part in enumerate(away)) / r
    size, phase = np.exp(np.float32(k.imag) * r) / (np.float32(4 * np.pi) * r), np.float32(k.real) * r
    g = size * np.cos(phase) - 1j * (size * np.sin(phase))
    p, f = pressure.astype(np.complex64), flux.astype(np.complex64)
    return np.asarray((g * along) @ (np.complex64(-1j * k) * p) - (g * along / r) @ p + g @ f, dtype=np.complex128)


def far_kernel(directions: Floats, k: complex, centre: Floats) -> Kernel:
    """G and dG/dn of unit directions (k, 3): e^{ik d.(y - x_c)} / (4 pi)."""

    def of(y: Floats, n: Floats) -> tuple[Complex, Complex]:
        g = np.exp(1j * k * (directions @ (y - centre).T)) / (4 * np.pi)
        return g, 1j * k * (directions @ n.T) * g

    return of


@dataclass(frozen=True, eq=False)
class Exterior:
    """The outside of one envelope; `size` is the number of all unknowns of the system."""

    envelope: Envelope
    size: int

    @cached_property
    def matrices(self) -> tuple[sp.csr_matrix, sp.csr_matrix, sp.csr_matrix]:
        """K, C, M of the infinite elements, (size, size)."""
        return self.envelope.matrices(self.size)

    def operator(self, k: complex) -> sp.csr_matrix:
        """K + ikC - k^2 M: rho A_out."""
        stiffness, wave, mass = self.matrices
        return sp.csr_matrix(stiffness + 1j * k * wave - k * k * mass)

    def pressure_rows(self, points: Floats, k: complex) -> Complex:
        """Rows (m, size) with p(x) = row . u at points (m, 3) outside."""
        return self._rows(lambda at: point_kernel(at, k), np.atleast_2d(points), k, self._degree(points))

    def far_rows(self, directions: Floats, k: complex) -> Complex:
        """Rows (m, size) with F(d) = row . u [Pa m] for unit directions (m, 3) from the centre."""
        unit = np.atleast_2d(directions) / np.linalg.norm(np.atleast_2d(directions), axis=1, keepdims=True)
        centre = self.envelope.centre
        degree = 2 * self.envelope.dofs.max_order + _DEGREE
        return self._rows(lambda at: far_kernel(at, k, centre), unit, k, degree, directions=True)

    def _rows(
        self, kernel: Callable[[Floats], Kernel], x: Floats, k: complex, degree: int, *, directions: bool = False
    ) -> Complex:
        env = self.envelope
        at, traces = self._quadrature(degree)
        y, n, weights = at.points.reshape(-1, 3), at.normals.reshape(-1, 3), at.weights.ravel()
        g, slope = kernel(x)(y, n)
        if env.ground is not None:
            image = env.ground.mirror(np.zeros(3) if directions else env.centre, x)
            g_image, slope_image = kernel(image)(y, n)
            g, slope = g + env.ground.sign * g_image, slope + env.ground.sign * slope_image
        double = (slope * weights) @ traces
        free = ~env.held
        projected = np.zeros((len(env.trace), len(x)), dtype=np.complex128)
        projected[free] = self._project(traces[:, free].T @ (g * weights).T)
        stiffness, wave, mass = (part @ projected for part in self._to_trace)
        rows = np.asarray((stiffness + 1j * k * wave - k * k * mass).T, dtype=np.complex128)
        rows[:, env.trace] += double
        return rows

    @cached_property
    def _to_trace(self) -> tuple[sp.csr_matrix, ...]:
        """K^T, C^T, M^T (size, T): what the surface's own rows of the operator take from all unknowns."""
        return tuple(matrix[self.envelope.trace].T.tocsr() for matrix in self.matrices)

    def pressure(self, points: Floats, k: complex, field: Complex) -> Complex:
        """p (m, r) at points (m, 3) outside, of a field u (size, r): `pressure_rows` @ u, without the rows."""
        # the finer, the nearer: each rule met 1e-5 on a dome with faces of 2.6 radians where it is used
        degrees = (self._near_degree, self._usual_degree, self.envelope.dofs.max_order + _DEGREE)
        tier = np.digitize(self._clearance(points) / self._longest, _TIERS)
        out = np.zeros((len(points), field.shape[1]), dtype=np.complex128)
        for number in np.unique(tier):
            out[tier == number] = self._integrated(points[tier == number], k, field, degrees[number])
        return out

    def _integrated(self, points: Floats, k: complex, field: Complex, degree: int) -> Complex:
        """int (p dG/dn - G dp/dn) dS for many points, some at a time."""
        env = self.envelope
        y, n, pressure, flux = self._surface_values(degree, k, field)

        def of(x: Floats) -> Complex:
            return _summed(x, y, n, k, pressure, flux)

        found = []
        for x in np.array_split(points, len(points) * len(y) // _PAIRS + 1):
            found.append(of(x))
            if env.ground is not None:
                found[-1] += env.ground.sign * of(env.ground.mirror(env.centre, x))
        return np.concatenate(found)

    def _surface_values(self, degree: int, k: complex, field: Complex) -> tuple[Floats, Floats, Complex, Complex]:
        """Points and normals (q, 3) of the rule, and p and -dp/dn (q, r) of a field there, times the rule's weights."""
        env = self.envelope
        at, traces = self._quadrature(degree)
        free, weights = ~env.held, at.weights.reshape(-1, 1)
        pressure = weights * (traces @ field[env.trace])
        flux = weights * (traces[:, free] @ self._project((self.operator(k)[env.trace] @ field)[free]))
        return at.points.reshape(-1, 3), at.normals.reshape(-1, 3), pressure, flux

    def far(self, directions: Floats, k: complex, field: Complex) -> Complex:
        """F (m, r) [Pa m] in directions (m, 3), of a field u (size, r): `far_rows` @ u, without the rows."""
        unit = np.atleast_2d(directions) / np.linalg.norm(np.atleast_2d(directions), axis=1, keepdims=True)
        env = self.envelope
        y, n, pressure, flux = self._surface_values(env.dofs.max_order + _DEGREE, k, field)

        def of(d: Floats) -> Complex:
            g, slope = far_kernel(d, k, env.centre)(y, n)
            return np.asarray(slope @ pressure + g @ flux)

        found = []
        for d in np.array_split(unit, len(unit) * len(y) // _PAIRS + 1):
            found.append(of(d))
            if env.ground is not None:
                found[-1] += env.ground.sign * of(env.ground.mirror(np.zeros(3), d))
        return np.concatenate(found)

    def _project(self, moments: npt.NDArray[np.complexfloating[Any, Any]]) -> Complex:
        real, imag = (self._mass_factor.solve(np.ascontiguousarray(part)) for part in (moments.real, moments.imag))
        return np.asarray(real + 1j * imag, dtype=np.complex128)

    @cached_property
    def _mass_factor(self) -> spla.SuperLU:
        free = ~self.envelope.held
        return spla.splu(self.envelope.mass[free][:, free].tocsc())

    def _degree(self, points: Floats) -> int:
        near = float(self._clearance(np.atleast_2d(points)).min())
        return self._usual_degree if near > self._longest else self._near_degree

    @property
    def _usual_degree(self) -> int:
        return 2 * self.envelope.dofs.max_order + _DEGREE

    @property
    def _near_degree(self) -> int:
        return max(self._usual_degree, _NEAR_DEGREE)

    def _clearance(self, points: Floats) -> Floats:
        """Distance (m,) [m] of points (m, 3) to the nearest of some points of the surface."""
        return np.asarray(self._tree.query(points)[0])

    @cached_property
    def _tree(self) -> cKDTree:
        return cKDTree(self._quadrature(4)[0].points.reshape(-1, 3))

    @cached_property
    def _longest(self) -> float:
        return float(self.envelope.geometry.edge_lengths[self.envelope.tet].max())

    def _quadrature(self, degree: int) -> tuple[FacePoints, sp.csr_matrix]:
        held: dict[int, tuple[FacePoints, sp.csr_matrix]] = self._rules
        if degree not in held:
            held[degree] = self.envelope.points(degree)
        return held[degree]

    @cached_property
    def _rules(self) -> dict[int, tuple[FacePoints, sp.csr_matrix]]:
        return {}

    def beyond(self, points: Floats) -> npt.NDArray[np.bool_]:
        """Which points (m, 3) lie outside: above the surface where their ray from the centre leaves it; near it, where that
        is not sharp enough, those from which it (with its image) covers no solid angle."""
        env, x = self.envelope, np.atleast_2d(points)
        height = self._height(x)
        outside = height > 0
        close = np.flatnonzero(np.abs(height) < _SURE * self._longest)
        for some in np.array_split(close, len(close) // _FEW + 1):
            outside[some] = self._open(x[some])
        if env.ground is None:
            return np.asarray(outside)
        return np.asarray(outside & ((x - env.centre) @ np.asarray(env.ground.normal) >= -1e-9 * env.largest_radius))

    def _height(self, x: Floats) -> Floats:
        """Heights (m,) [m] above the planes that touch the surface nearest to the rays from its centre: it is star-shaped."""
        at, _ = self._quadrature(_NEAR_DEGREE)
        y, n = at.points.reshape(-1, 3), at.normals.reshape(-1, 3)
        arms, rays = x - self.envelope.centre, y - self.envelope.centre
        tree = cKDTree(rays / np.linalg.norm(rays, axis=1, keepdims=True))
        place = tree.query(arms / np.maximum(np.linalg.norm(arms, axis=1, keepdims=True), 1e-300))[1]
        return np.asarray(np.einsum("md,md->m", x - y[place], n[place]))

    def _open(self, x: Floats) -> npt.NDArray[np.bool_]:
        env = self.envelope
        at, _ = self._quadrature(_NEAR_DEGREE)
        y, flux = at.points.reshape(-1, 3), (at.normals * at.weights[..., None]).reshape(-1, 3)

        def covered(x: Floats) -> Floats:
            away = y[None] - x[:, None]
            return np.asarray(np.einsum("kqd,qd->k", away / np.linalg.norm(away, axis=2)[..., None] ** 3, flux) / (4 * np.pi))

        if env.ground is None:
            return np.asarray(covered(x) < 0.5)
        return np.asarray(covered(x) + covered(env.ground.mirror(env.centre, x)) < 0.5)

    def surface_power(self, field: Complex, k: complex, rho_omega: complex) -> float:
        """W = Re int p conj(v_n) dS / 2 [W] of a field u (size,): the power through the surface; rho_omega = rho w."""
        flux = -(self.operator(k)[self.envelope.trace] @ field)  # int N_a dp/dn dS
        velocity = 1j * flux / rho_omega  # v_n = i/(rho w) dp/dn
        return float(0.5 * np.real(np.vdot(velocity, field[self.envelope.trace])))

    def far_power(self, field: Complex, k: float, impedance: float, points: int = 0) -> float:
        """W = int |F|^2 dOmega / (2 rho c) [W] over the sphere, or over the half space above a ground plane, of a field
        (size,) or summed over fields (size, r)."""
        count = points or int(np.ceil(2 * k * self.envelope.largest_radius)) + 12
        directions, weights = sphere_rule(count)
        if self.envelope.ground is not None:
            weights = 0.5 * weights  # images make the pattern even about the plane
        pattern = self.far(directions, k, field.reshape(len(field), -1))
        return float(weights @ (np.abs(pattern) ** 2).sum(axis=1) / (2 * impedance))


def sphere_rule(count: int) -> tuple[Floats, Floats]:
    """Directions (2 count^2, 3) and weights that sum to 4 pi; exact for spherical harmonics up to order 2 count - 1."""
    z, w = leggauss(count)
    angle = np.pi * (np.arange(2 * count) + 0.5) / count
    s = np.sqrt(1.0 - z**2)
    x = np.stack([np.outer(s, np.cos(angle)), np.outer(s, np.sin(angle)), np.outer(z, np.ones(2 * count))], axis=2)
    return x.reshape(-1, 3), np.repeat(w * np.pi / count, 2 * count)


@dataclass(frozen=True, eq=False)
class Outside:
    """A solved field beyond one surface at one frequency: u (size, r) and the fluid's rho and c, with all losses.

    Where fields come from outside (`arriving`: each with its part (r,) in the columns), u is what is added to them, and so are
    far field and power: they are scattered. `pressure` holds both.
    """

    name: str
    exterior: Exterior
    field: Complex
    frequency: float
    rho: complex
    c: complex
    arriving: tuple[tuple[Incident, Complex], ...] = ()

    def with_arriving(self, fields: Sequence[tuple[IncidentField, Complex]]) -> Outside:
        """The same where `field` still holds the traces of fields from outside, each with its part (r,)."""
        f, k, rho = (np.array([value]) for value in (self.frequency, self.k, self.rho))
        found = tuple((Incident.of(load, self.exterior, self.k.real, self.k.real), part) for load, part in fields)
        own = [np.outer(held.traces @ held.surface(f, k, rho)[0], part) for held, part in found]
        return replace(self, field=self.field - np.sum(own, axis=0), arriving=found)

    @property
    def k(self) -> complex:
        """Wave number [1/m]."""
        return 2 * np.pi * self.frequency / self.c

    def pressure(self, points: Floats) -> Complex:
        """p (m, r) [Pa] at points (m, 3) outside."""
        if not len(points):
            return self.field[:0]
        f, k, rho = (np.array([value]) for value in (self.frequency, self.k, self.rho))
        own = [np.outer(held.at(points, f, k, rho)[0], part) for held, part in self.arriving]
        return np.asarray(self.exterior.pressure(points, self.k, self.field) + np.sum(own, axis=0), dtype=np.complex128)

    def far_field(self, directions: Floats) -> Complex:
        """F (m, r) [Pa m] in directions (m, 3): p -> F e^{-ikR} / R, R the distance from the centre."""
        return self.exterior.far(directions, self.k, self.field)

    def directivity_index(self, directions: Floats) -> Floats:
        """DI (m,) [dB], of the mean squares of all columns together."""
        square = (np.abs(self.far_field(directions)) ** 2).sum(axis=1)
        total = 2 * (self.rho * self.c).real * self.far_power
        return np.asarray(10 * np.log10(np.maximum(4 * np.pi * square / total, 1e-300)))

    @property
    def power(self) -> float:
        """Radiated power [W] from the intensity on the surface."""
        rho_w = 2 * np.pi * self.frequency * self.rho
        return sum(self.exterior.surface_power(u, self.k, rho_w) for u in self.field.T)

    @property
    def far_power(self) -> float:
        """Radiated power [W] from the far field (of the fluid without its losses); it must agree with `power`."""
        impedance = (self.rho * self.c).real
        return self.exterior.far_power(self.field, self.k.real, impedance)


# ---------------------------------------------------------------------------------------------------------------------
# a band at once


@dataclass(frozen=True)
class Band:
    """Polynomials in k through m Chebyshev nodes: what depends on k smoothly becomes a sum of fixed vectors.

    v(k) = sum_m l_m(k) v(k_m); exact to about 1e-11 for e^{iky} with |y| <= reach where m > (k range) reach / 2 + 14.
    """

    low: float
    high: float
    count: int

    @classmethod
    def of(cls, low: float, high: float, reach: float) -> Band:
        """The band low..high [rad/m], a little wider than zero, for phases up to `reach` [m]."""
        half = max(0.5 * (high - low), 0.05 * high)
        middle = 0.5 * (high + low)
        return cls(middle - half, middle + half, int(np.ceil(1.1 * half * reach)) + 14)

    @property
    def nodes(self) -> Floats:
        """k_m (m,) [rad/m]."""
        x = np.cos(np.pi * (np.arange(self.count) + 0.5) / self.count)
        return np.asarray(0.5 * (self.low + self.high) + 0.5 * (self.high - self.low) * x)

    def weights(self, k: npt.NDArray[np.inexact]) -> Complex:
        """l_m(k) (nf, m), also for the complex k of a lossy fluid."""
        x = (2.0 * np.asarray(k, dtype=np.complex128) - self.low - self.high) / (self.high - self.low)
        at = np.cos(np.pi * (np.arange(self.count) + 0.5) / self.count)
        scale = np.full(self.count, 2.0 / self.count)
        scale[0] = 1.0 / self.count
        return np.asarray((chebvander(x, self.count - 1) * scale) @ chebvander(at, self.count - 1).T)


@dataclass(frozen=True, eq=False)
class Listener:
    """The pressure at one point outside, for every k of a band: p = e^{-ikd} sum_m l_m(k) (row_m . u).

    rows (2 m, size): real parts, then imaginary parts; d [m] from the centre of the envelope.
    """

    band: Band
    distance: float
    rows: sp.csr_matrix

    @classmethod
    def at(cls, exterior: Exterior, point: Floats, low: float, high: float) -> Listener:
        """For the wave numbers low..high [rad/m]."""
        env = exterior.envelope
        distance = float(np.linalg.norm(point - env.centre))
        band = Band.of(low, high, env.largest_radius)
        found = [np.exp(1j * k * distance) * exterior.pressure_rows(point[None], k)[0] for k in band.nodes]
        rows = np.array(found)
        return cls(band, distance, sp.csr_matrix(np.vstack([rows.real, rows.imag])))

    def weights(self, k: Complex) -> Complex:
        """chi (nf, 2 m) of the rows."""
        each = np.exp(-1j * k * self.distance)[:, None] * self.band.weights(k)
        return np.hstack([each, 1j * each])


def with_image(field: IncidentField, envelope: Envelope, points: Floats, k: complex) -> tuple[Complex, Complex]:
    """Shape (q,) and gradient (q, 3) of a field from outside, its reflection by the ground plane included."""
    value, gradient = field.shape(points, k)
    if envelope.ground is None:
        return value, gradient
    n, sign = np.asarray(envelope.ground.normal), envelope.ground.sign
    image, slope = field.shape(envelope.ground.mirror(envelope.centre, points), k)
    return value + sign * image, gradient + sign * (slope - 2.0 * (slope @ n)[:, None] * n)


@dataclass(frozen=True, eq=False)
class Incident:
    """A field p_i from outside as a load, for every k of a band. The unknowns of the outside carry what is added to it:

        A_out (u - u_i) - (1/rho) int q dp_i/dn dS   in the place of A_out u,   u_i = (p_i on the surface, 0)

    traces (size, 2 m): u_i of unit amplitude at the band's nodes, real and imaginary parts; vectors (size, 6 m): the loads
    K u_i + flux, C u_i, M u_i; delay [m] taken out of the phases.
    """

    field: IncidentField
    exterior: Exterior
    band: Band
    traces: sp.csc_matrix
    vectors: sp.csc_matrix
    delay: float

    @classmethod
    def of(cls, field: IncidentField, exterior: Exterior, low: float, high: float) -> Incident:
        """For the wave numbers low..high [rad/m]."""
        env = exterior.envelope
        band = Band.of(low, high, env.largest_radius)
        at, rows = exterior._quadrature(2 * env.dofs.max_order + _DEGREE)
        y, n, weights = at.points.reshape(-1, 3), at.normals.reshape(-1, 3), at.weights.ravel()
        delay = field.delay(env.centre)
        trace, flux = (np.zeros((exterior.size, band.count), dtype=np.complex128) for _ in range(2))
        for m, k in enumerate(band.nodes):
            value, gradient = with_image(field, env, y, k)
            turn = np.exp(1j * k * delay) * weights
            trace[env.trace[~env.held], m] = exterior._project(rows[:, ~env.held].T @ (turn * value))
            flux[env.trace, m] = rows.T @ (turn * np.einsum("qd,qd->q", gradient, n))
        stiffness, wave, mass = exterior.matrices
        loads = [_real(part) for part in (stiffness @ trace + flux, wave @ trace, mass @ trace)]
        return cls(field, exterior, band, sp.csc_matrix(_real(trace)), sp.csc_matrix(np.hstack(loads)), delay)

    def _each(self, f: Floats, k: Complex, rho: Complex) -> Complex:
        amplitude = self.field.amplitude(f, rho) * np.exp(-1j * k * self.delay)
        each = amplitude[:, None] * self.band.weights(k)
        return np.hstack([each, 1j * each])

    def weights(self, f: Floats, k: Complex, rho: Complex) -> Complex:
        """psi (nf, 6 m) of the vectors."""
        each = self._each(f, k, rho)
        return np.hstack([(factor / rho)[:, None] * each for factor in (np.ones_like(k), 1j * k, -k * k)])

    def surface(self, f: Floats, k: Complex, rho: Complex) -> Complex:
        """Weights (nf, 2 m) of the traces."""
        return self._each(f, k, rho)

    def at(self, points: Floats, f: Floats, k: Complex, rho: Complex) -> Complex:
        """p_i (nf, q) [Pa] at points outside."""
        shapes = [with_image(self.field, self.exterior.envelope, points, complex(each))[0] for each in k]
        return self.field.amplitude(f, rho)[:, None] * np.array(shapes).reshape(len(f), len(points))


def _real(columns: npt.NDArray[np.complexfloating[Any, Any]]) -> Floats:
    return np.hstack([columns.real, columns.imag])
