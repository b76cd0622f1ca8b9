"""The one equation, as a sum of terms.

    A(w) p = f(w),   A(w) = sum_j phi_j(w) A_j,   f(w) = sum_l F_l psi_l(w),   p_r = e_r^T p

    A(w) = sum_r [ K_r / rho_r - w^2 M_r / (rho_r c_r^2) ] + i w sum_s Y_s B_s     (all A_j real and symmetric)
    f(w) = -i w sum_s integral q v_s dS + i w Q q(x_Q) + 2 i w Y_port p_in integral q dS

Coefficients belong to media, boundary kinds and loads. Prescribed pressure is a constraint p = P q + g(w) on the sum.
Nothing outside this module knows how the sum is made up: solving, adjoints, power and modes are operations on it.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from murmesh.solver.assembly import (
    evaluate,
    face_dofs,
    surface_cross_mass,
    surface_load,
    surface_mass,
    surface_points,
    volume_matrices,
)
from murmesh.solver.case.boundary import Adjacent, Boundary
from murmesh.solver.case.expression import parse
from murmesh.solver.case.load import IncomingWave, Load, Monopole, SurfacePressure, SurfaceVelocity
from murmesh.solver.case.medium import damped
from murmesh.solver.case.model import Case, Region
from murmesh.solver.case.motion import Motion
from murmesh.solver.case.spectrum import as_spectrum
from murmesh.solver.errors import CaseError, MeshError
from murmesh.solver.receiver_points import Samples
from murmesh.solver.scan import interpolation
from murmesh.solver.space import Side, Space

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Ints = npt.NDArray[np.int64]
Coefficient = Callable[[Floats], Complex]


@dataclass(frozen=True, eq=False)
class Term:
    """phi(f) A: `label` says to whom the power it takes belongs ("volume/air", "surface/roof")."""

    label: str
    matrix: sp.csr_matrix
    phi: Coefficient


@dataclass(frozen=True, eq=False)
class LoadTerm:
    """F psi(f): F (n, m) real, psi(f) (nf, m) complex. `fixes` terms give pressures of constrained unknowns instead."""

    load: str
    vectors: sp.csc_matrix
    psi: Coefficient
    fixes: bool = False


@dataclass(frozen=True, eq=False)
class LoadSet:
    """The loads of one load case, in its order; `uncovered` is the area [m2] of each surface that no scan point covers."""

    name: str
    loads: tuple[str, ...]
    terms: tuple[LoadTerm, ...]
    uncovered: dict[str, float]

    def vectors(self, f: float) -> tuple[Complex, Complex]:
        """Right-hand sides and prescribed pressures, both (n, loads), at one frequency."""
        n = self.terms[0].vectors.shape[0]
        forces, given = (np.zeros((n, len(self.loads)), dtype=np.complex128) for _ in range(2))
        for term in self.terms:
            target = given if term.fixes else forces
            target[:, self.loads.index(term.load)] += term.vectors @ term.psi(np.array([f]))[0]
        return forces, given


@dataclass(frozen=True, eq=False)
class System:
    """The sum of terms of one case on one space."""

    space: Space
    terms: tuple[Term, ...]
    load_sets: tuple[LoadSet, ...]
    receivers: sp.csr_matrix
    fixed: npt.NDArray[np.bool_]

    @property
    def size(self) -> int:
        """Number of unknowns, constrained ones included."""
        return int(self.fixed.size)

    @cached_property
    def pattern(self) -> Pattern:
        return Pattern.of(tuple(term.matrix for term in self.terms), ~self.fixed)

    def coefficients(self, f: Floats) -> Complex:
        """phi_j(f), (nf, terms)."""
        return np.stack([term.phi(f) for term in self.terms], axis=1)

    def matrix(self, phi: Complex) -> sp.csr_matrix:
        """A = sum_j phi_j A_j for one row of coefficients."""
        data = np.zeros(self.pattern.nnz, dtype=np.complex128)
        for coefficient, term, slots in zip(phi, self.terms, self.pattern.slots, strict=True):
            if slots is None:
                data += coefficient * term.matrix.data
            else:
                data[slots] += coefficient * term.matrix.data
        return sp.csr_matrix((data, self.pattern.indices, self.pattern.indptr), shape=(self.size, self.size))


@dataclass(frozen=True, eq=False)
class Pattern:
    """One sparsity pattern for all frequencies, where each term's entries go (None: everywhere), the free lower triangle."""

    indptr: Ints
    indices: Ints
    slots: tuple[Ints | None, ...]
    lower: sp.csc_matrix
    lower_slots: Ints

    @property
    def nnz(self) -> int:
        return len(self.indices)

    @classmethod
    def of(cls, matrices: tuple[sp.csr_matrix, ...], free: npt.NDArray[np.bool_]) -> Pattern:
        n = len(free)
        keys = [_keys(matrix) for matrix in matrices]
        union = keys[0]
        for key in keys[1:]:
            if not np.isin(key, union, assume_unique=True).all():
                union = np.union1d(union, key)
        rows, columns = union // n, union % n
        indptr = np.searchsorted(rows, np.arange(n + 1))
        # a row of the upper triangle is, by symmetry, a column of the lower one
        upper = np.flatnonzero((rows <= columns) & free[rows] & free[columns])
        number = np.cumsum(free) - 1
        count = int(free.sum())
        pointer = np.searchsorted(number[rows[upper]], np.arange(count + 1))
        lower = sp.csc_matrix((np.ones(len(upper)), number[columns[upper]], pointer), shape=(count, count))
        return cls(indptr, columns, tuple(_slots(union, key) for key in keys), lower, upper)


def _slots(union: Ints, key: Ints) -> Ints | None:
    """Where a term's entries go; None where it fills the whole pattern, as the volume's do."""
    return None if len(key) == len(union) else np.searchsorted(union, key)


def _keys(matrix: sp.csr_matrix) -> Ints:
    matrix.sum_duplicates()
    rows = np.repeat(np.arange(matrix.shape[0], dtype=np.int64), np.diff(matrix.indptr))
    return rows * matrix.shape[1] + matrix.indices


# ---------------------------------------------------------------------------------------------------------------------
# building the sum


def build_system(space: Space, samples: Samples) -> System:
    """The sum of terms of `space.case`, with one output row per receiver sample."""
    case = space.case
    terms = [*_volume_terms(space), *_surface_terms(space), *_sheet_terms(space)]
    sets = tuple(_load_set(space, index) for index in range(len(case.load_cases)))
    receivers = evaluate(space.geometry, space.dofs, samples.tet, samples.bary)
    return System(space, tuple(terms), sets, receivers, pressure_fixed(space))


def adjacent(case: Case, region: int, f: Floats) -> Adjacent:
    """The fluid of a region as a surface sees it."""
    rho, c = damped(case.regions[region].medium, case.regions[region].damping, f)
    return Adjacent(case.regions[region].medium.reference, rho * c)


def _volume_terms(space: Space) -> list[Term]:
    terms = []
    for index, region in enumerate(space.case.regions):
        tets = np.flatnonzero(space.case.mesh.tet_region == index)
        if not len(tets):
            raise MeshError(f"regions/{region.name} has no tetrahedron; mesh it, or take the region out of the job")
        stiffness, mass = volume_matrices(space.geometry, space.dofs, tets)

        def phi_k(f: Floats, region: Region = region) -> Complex:
            return np.asarray(1.0 / damped(region.medium, region.damping, f)[0])

        def phi_m(f: Floats, region: Region = region) -> Complex:
            rho, c = damped(region.medium, region.damping, f)
            return np.asarray(-((2 * np.pi * f) ** 2) / (rho * c**2))

        terms += [Term(f"volume/{region.name}", stiffness, phi_k), Term(f"volume/{region.name}", mass, phi_m)]
    return terms


def _side_admittance(case: Case, side: Side, f: Floats) -> Complex | None:
    near = adjacent(case, side.region, f)
    own = side.boundary.admittance(f, near)
    if own is None and side.boundary.hard:
        own = case.regions[side.region].damping.hard_wall_admittance(f, near.fluid)
        return own if np.any(own) else None
    return own


def _surface_terms(space: Space) -> list[Term]:
    case, terms = space.case, []
    for side in space.sides:
        if _side_admittance(case, side, case.sweep.frequencies) is None:
            continue

        def phi(f: Floats, side: Side = side) -> Complex:
            return _i_w(f, _side_admittance(case, side, f))

        matrix = surface_mass(space.geometry, space.dofs, side.tet, side.face)
        terms.append(Term(f"surface/{case.surfaces[side.surface].name}", matrix, phi))
    return terms


def _sheet_terms(space: Space) -> list[Term]:
    """i w Y_t [B_aa, -B_ab; -B_ba, B_bb]: air passes in proportion to the pressure difference."""
    case, terms = space.case, []
    for pair in space.sheets:
        boundary = case.surfaces[pair.surface].boundary
        if _transfer(case, boundary, pair.region, case.sweep.frequencies) is None:
            continue
        geometry, dofs = space.geometry, space.dofs
        cross = surface_cross_mass(geometry, dofs, pair.front, pair.back)
        own = surface_mass(geometry, dofs, *pair.front) + surface_mass(geometry, dofs, *pair.back)

        def phi(f: Floats, boundary: Boundary = boundary, region: int = pair.region) -> Complex:
            return _i_w(f, _transfer(case, boundary, region, f))

        matrix = (own - cross - cross.T).tocsr()
        terms.append(Term(f"surface/{case.surfaces[pair.surface].name}", matrix, phi))
    return terms


def _i_w(f: Floats, admittance: Complex | None) -> Complex:
    """i w Y (nf,); zero where the surface is hard at these frequencies."""
    return np.zeros(len(f), dtype=np.complex128) if admittance is None else 2j * np.pi * f * admittance


def _transfer(case: Case, boundary: Boundary, region: int, f: Floats) -> Complex | None:
    return boundary.transfer_admittance(f, adjacent(case, region, f))


def pressure_fixed(space: Space) -> npt.NDArray[np.bool_]:
    """Which unknowns (n,) a surface of kind `pressure` constrains."""
    fixed = np.zeros(space.dofs.n_dofs, dtype=bool)
    for side in space.sides:
        if side.boundary.fixes_pressure:
            fixed[face_dofs(space.dofs, side.tet, side.face)] = True
    return fixed


# ---------------------------------------------------------------------------------------------------------------------
# loads


def _load_set(space: Space, index: int) -> LoadSet:
    load_case = space.case.load_cases[index]
    terms: list[LoadTerm] = []
    uncovered: dict[str, float] = {}
    for load in load_case.loads:
        terms += _load_terms(space, load, uncovered)
    return LoadSet(load_case.name, tuple(load.name for load in load_case.loads), tuple(terms), uncovered)


def _load_terms(space: Space, load: Load, uncovered: dict[str, float]) -> list[LoadTerm]:
    match load:
        case SurfaceVelocity():
            return _velocity_terms(space, load, uncovered)
        case SurfacePressure():
            return _pressure_terms(space, load)
        case IncomingWave():
            return _wave_terms(space, load)
        case Monopole():
            return [_monopole_term(space, load)]
    raise CaseError(f"a load of kind '{load.kind_name}' cannot be assembled")  # pragma: no cover


def _loaded_sides(space: Space, load: Load) -> tuple[Side, ...]:
    index = [surface.name for surface in space.case.surfaces].index(load.acts_on)
    sides = space.sides_of(index)
    if not sides:
        raise MeshError(f"surfaces/{load.acts_on} carries a load but has no triangle; check its physical group")
    return sides


def _velocity_terms(space: Space, load: SurfaceVelocity, uncovered: dict[str, float]) -> list[LoadTerm]:
    terms = []
    bare = {1: 0.0, -1: 0.0}
    for side in _loaded_sides(space, load):
        if not (side.boundary.moves or side.boundary.hard):
            continue  # an absorbing side of a sheet does not move with it

        def psi(f: Floats, side: Side = side) -> Complex:
            drive = side.boundary.drive(f, adjacent(space.case, side.region, f))
            return np.asarray((-2j * np.pi * f * side.sign * drive)[:, None] * load.motion.outward(f))

        vectors, missed = _shape_vectors(space, side, load.motion)
        bare[side.sign] += missed
        terms.append(LoadTerm(load.name, vectors, psi))
    if max(bare.values()) > 0:
        uncovered[load.name] = max(bare.values())  # front and back of a sheet are one area
    return terms


def _shape_vectors(space: Space, side: Side, motion: Motion) -> tuple[sp.csc_matrix, float]:
    """integral q shape_m dS as columns (n, m), and the area no scan point covers [m2]."""
    shape = motion.shape()
    geometry, dofs = space.geometry, space.dofs
    if shape is None:
        return _column(surface_load(geometry, dofs, side.tet, side.face, None)), 0.0
    if isinstance(shape, str):
        function = parse(shape)
        load = surface_load(geometry, dofs, side.tet, side.face, lambda x: function(x[:, 0], x[:, 1], x[:, 2]))
        return _column(load), 0.0
    points, weights, _ = surface_points(geometry, side.tet, side.face, 4)
    missed = float(weights[~interpolation(shape, points).covered].sum())
    load = surface_load(
        geometry, dofs, side.tet, side.face, lambda x: interpolation(shape, x).weights.toarray(), degree=space.order + 4
    )
    return sp.csc_matrix(load), missed


def _column(vector: npt.NDArray[Any]) -> sp.csc_matrix:
    return sp.csc_matrix(np.asarray(vector, dtype=np.float64)[:, None])


def _pressure_terms(space: Space, load: SurfacePressure) -> list[LoadTerm]:
    """A uniform pressure is carried by the vertex unknowns alone: they sum to one, the others vanish at vertices.

    Where surfaces of kind `pressure` meet, each gives its part: the line between them takes the mean of their pressures.
    """
    meeting = np.zeros(space.dofs.n_dofs)
    for index in {side.surface for side in space.sides if side.boundary.fixes_pressure}:
        meeting += _on_vertices(space, space.sides_of(index))
    ones = _on_vertices(space, _loaded_sides(space, load)) / np.maximum(meeting, 1.0)
    return [LoadTerm(load.name, _column(ones), lambda f: as_spectrum(load.pressure).at(f)[:, None], fixes=True)]


def _on_vertices(space: Space, sides: tuple[Side, ...]) -> Floats:
    """One at the vertex unknowns of some sides, (n,)."""
    ones = np.zeros(space.dofs.n_dofs)
    for side in sides:
        dofs = face_dofs(space.dofs, side.tet, side.face)
        ones[dofs[dofs < space.topology.n_vertices]] = 1.0
    return ones


def _wave_terms(space: Space, load: IncomingWave) -> list[LoadTerm]:
    terms = []
    for side in _loaded_sides(space, load):

        def psi(f: Floats, side: Side = side) -> Complex:
            admittance = 1.0 / adjacent(space.case, side.region, f).impedance
            return np.asarray((4j * np.pi * f * admittance * as_spectrum(load.pressure).at(f))[:, None])

        load_vector = surface_load(space.geometry, space.dofs, side.tet, side.face, None)
        terms.append(LoadTerm(load.name, _column(load_vector), psi))
    return terms


def _monopole_term(space: Space, load: Monopole) -> LoadTerm:
    point = np.array([load.position])
    tet, bary = space.geometry.locate(point)
    if tet[0] < 0:
        near = space.geometry.nearest_point(point[0])
        raise CaseError(
            f"the source '{load.name}' at {load.position} lies outside every region; the nearest point of the fluid is "
            f"({near[0]:.4g}, {near[1]:.4g}, {near[2]:.4g})"
        )
    row = evaluate(space.geometry, space.dofs, tet, bary)

    def psi(f: Floats) -> Complex:
        return np.asarray((2j * np.pi * f * as_spectrum(load.volume_velocity).at(f))[:, None])

    return LoadTerm(load.name, row.T.tocsc(), psi)
