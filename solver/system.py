"""The one equation, as a sum of terms.

    A(w) p = f(w),   A(w) = sum_j phi_j(w) A_j,   f(w) = sum_l F_l psi_l(w),   p_r = e_r^T p

    A(w) = sum_r [ K_r / rho_r - w^2 M_r / (rho_r c_r^2) ] + i w sum_s Y_s B_s     (all A_j real and symmetric)
           + sum_e (1/rho) [ K_e + i (w/c) C_e - (w/c)^2 M_e ]         (infinite elements: real, K_e and C_e unsymmetric)
    f(w) = -i w sum_s integral q v_s dS + i w Q q(x_Q) + 2 i w Y_port p_in integral q dS

Coefficients belong to media, boundary kinds and loads. Prescribed pressure is a constraint p = P q + g(w) on the sum.
Nothing outside this module knows how the sum is made up: solving, adjoints, power and modes are operations on it.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cache, cached_property, partial
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
from murmesh.solver.case.load import (
    IncidentField,
    IncomingWave,
    Load,
    Monopole,
    OutsideMonopole,
    SurfacePressure,
    SurfaceVelocity,
)
from murmesh.solver.case.medium import damped
from murmesh.solver.case.model import Case, Region
from murmesh.solver.case.motion import Motion
from murmesh.solver.case.spectrum import as_spectrum
from murmesh.solver.errors import CaseError, MeshError
from murmesh.solver.exterior import Exterior, Incident, Listener
from murmesh.solver.receiver_points import Samples, not_in_fluid
from murmesh.solver.scan import interpolation
from murmesh.solver.space import SheetPair, Side, Space

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Ints = npt.NDArray[np.int64]
Coefficient = Callable[[Floats], Complex]
Matrix = Any
"""Sparse (csr, or csc for columns) on the unknowns of a mesh, an array on the few of a reduced model."""


@dataclass(frozen=True, eq=False)
class Term:
    """phi(f) A: `label` says to whom the power it takes belongs ("volume/air", "surface/roof").

    `power` n says that phi is w^n times something that changes slowly (0 for K, 1 for walls, 2 for M).
    The matrix is built when it is first asked for: a stored result needs the coefficients alone.
    """

    label: str
    phi: Coefficient
    build: Callable[[], Matrix]
    power: int = 1
    symmetric: bool = True

    @cached_property
    def matrix(self) -> Matrix:
        """A (n, n), real."""
        return self.build()


@dataclass(frozen=True, eq=False)
class LoadTerm:
    """F psi(f): F (n, m) real, psi(f) (nf, m) complex. `fixes` terms give pressures of constrained unknowns instead."""

    load: str
    psi: Coefficient
    build: Callable[[], Matrix]
    fixes: bool = False

    @cached_property
    def vectors(self) -> Matrix:
        """F (n, m), real."""
        return self.build()


@dataclass(frozen=True, eq=False)
class LoadSet:
    """The loads of one load case, in its order; `from_outside`: one of them is a field from outside."""

    name: str
    loads: tuple[str, ...]
    terms: tuple[LoadTerm, ...]
    from_outside: bool = False

    def vectors(self, psi: tuple[Complex, ...]) -> tuple[Complex, Complex]:
        """Right-hand sides and prescribed pressures, both (n, loads), for one row of coefficients per term."""
        n = self.terms[0].vectors.shape[0]
        forces, given = (np.zeros((n, len(self.loads)), dtype=np.complex128) for _ in range(2))
        for term, row in zip(self.terms, psi, strict=True):
            target = given if term.fixes else forces
            target[:, self.loads.index(term.load)] += term.vectors @ row
        return forces, given


@dataclass(frozen=True, eq=False)
class Values:
    """The coefficients of the sum at one frequency: phi (terms,), psi (m,) per load case and load term, and per load case
    the columns mix (loads, r) whose mean squares add up to the field's; chi (samples, rows) of the outputs, None for 1;
    direct (samples, loads) per load case: what is heard outside of a load by itself, nothing where there is none."""

    frequency: float
    phi: Complex
    psi: tuple[tuple[Complex, ...], ...]
    mix: tuple[Complex, ...]
    chi: Complex | None = None
    direct: tuple[Complex, ...] = ()

    def heard(self, rows: Matrix) -> Matrix:
        """Outputs from what the fixed rows give (rows, ...): themselves, or chi times them."""
        return rows if self.chi is None else self.chi @ rows


@dataclass(frozen=True, eq=False)
class System:
    """The sum of terms of one case, on the unknowns of a space or, projected, on those of a reduced model.

    receivers (rows, n)      fixed rows, one per receiver sample inside the mesh, many per sample outside of it
    fixed (n,)               unknowns whose pressure is prescribed
    outputs                  chi(f) (nf, samples, rows): the sample's row is chi(f) receivers; None where rows are samples
    """

    space: Space
    terms: tuple[Term, ...]
    load_sets: tuple[LoadSet, ...]
    receivers: Matrix
    fixed: npt.NDArray[np.bool_]
    outputs: Coefficient | None = None
    direct: Callable[[Floats], tuple[Complex, ...]] | None = None

    @property
    def size(self) -> int:
        """Number of unknowns, constrained ones included."""
        return int(self.fixed.size)

    @property
    def symmetric(self) -> bool:
        """Whether A = A^T, so that one solve serves forward and adjoint."""
        return all(term.symmetric for term in self.terms)

    @cached_property
    def form(self) -> Pattern | Stack:
        """How the terms are added up."""
        matrices = tuple(term.matrix for term in self.terms)
        if isinstance(matrices[0], np.ndarray):
            return Stack(np.stack(matrices))
        return Pattern.of(matrices, ~self.fixed, self.symmetric)

    def coefficients(self, f: Floats) -> Complex:
        """phi_j(f), (nf, terms)."""
        return np.stack([term.phi(f) for term in self.terms], axis=1)

    def values(self, f: Floats) -> list[Values]:
        """Every coefficient at the frequencies (nf,), the laws asked once for all of them.

        Raises: RangeError where a table ends before the frequencies do.
        """
        phi = self.coefficients(f)
        psi = [[term.psi(f) for term in held.terms] for held in self.load_sets]
        rules = [self.space.case.load_case(held.name).combination for held in self.load_sets]
        mix = [rule.factors(f, len(held.loads)) for rule, held in zip(rules, self.load_sets, strict=True)]
        chi = self.outputs(f) if self.outputs else None
        direct = self.direct(f) if self.direct else ()
        return [
            Values(
                float(at),
                phi[i],
                tuple(tuple(p[i] for p in held) for held in psi),
                tuple(m[i] for m in mix),
                None if chi is None else chi[i],
                tuple(d[i] for d in direct),
            )
            for i, at in enumerate(f)
        ]

    def matrix(self, phi: Complex) -> Any:
        """A = sum_j phi_j A_j for one row of coefficients: sparse, or dense for a projected system."""
        return self.form.combine(phi)

    def on(self, projected: Projected) -> System:
        """The same sum on p = W y, from its projected matrices: A_j -> W^T A_j W, F -> W^T F, e -> W^T e."""
        terms = tuple(replace(t, build=_constant(m)) for t, m in zip(self.terms, projected.matrices, strict=True))
        sets = tuple(
            replace(held, terms=tuple(replace(t, build=_constant(v)) for t, v in zip(held.terms, vectors, strict=True)))
            for held, vectors in zip(self.load_sets, projected.loads, strict=True)
        )
        return System(self.space, terms, sets, projected.receivers, projected.fixed, self.outputs, self.direct)

    @cached_property
    def prescribed_shapes(self) -> Floats:
        """Distinct shapes (n, m) of prescribed pressures over all load cases; m is 0 where nothing is prescribed."""
        found = [dense(t.vectors) for loads in self.load_sets for t in loads.terms if t.fixes]
        if not found:
            return np.zeros((self.size, 0))
        return np.unique(np.hstack(found), axis=1)


@dataclass(frozen=True, eq=False)
class Projected:
    """The numbers of a sum on p = W y; with the laws of its case they are a `System` (see `System.on`).

    matrices (terms, K, K); loads: per load case, per load term (K, m); receivers (samples, K); fixed (K,).
    A column of W that is the shape of a prescribed pressure stays prescribed: its coordinate is that pressure.
    """

    matrices: Floats
    loads: tuple[tuple[Floats, ...], ...]
    receivers: Floats
    fixed: npt.NDArray[np.bool_]

    @classmethod
    def empty(cls, system: System) -> Projected:
        """No column yet."""
        loads = tuple(tuple(np.zeros((0, t.vectors.shape[1])) for t in held.terms) for held in system.load_sets)
        matrices = np.zeros((len(system.terms), 0, 0))
        return cls(matrices, loads, np.zeros((system.receivers.shape[0], 0)), np.zeros(0, dtype=bool))

    def extended(
        self,
        system: System,
        basis: Floats,
        columns: Floats,
        products: tuple[list[Floats], list[Floats]],
        *,
        prescribed: bool,
    ) -> Projected:
        """W = [basis, columns], from the projection on `basis` and the products A_j columns and A_j^T columns."""
        size = basis.shape[1] + columns.shape[1]
        matrices = np.empty((len(self.matrices), size, size))
        at = basis.shape[1]
        for out, old, right, left in zip(matrices, self.matrices, *products, strict=True):
            out[:at, :at], out[at:, at:] = old, columns.T @ right
            out[:at, at:], out[at:, :at] = basis.T @ right, left.T @ basis
        loads = tuple(
            tuple(np.vstack([v, _coordinates(t, columns, prescribed)]) for t, v in zip(held.terms, vectors, strict=True))
            for held, vectors in zip(system.load_sets, self.loads, strict=True)
        )
        receivers = np.hstack([self.receivers, np.asarray(system.receivers @ columns)])
        fixed = np.concatenate([self.fixed, np.full(columns.shape[1], prescribed)])
        return Projected(matrices, loads, receivers, fixed)


def _coordinates(term: LoadTerm, columns: Floats, prescribed: bool) -> Floats:
    """Rows (k, m) of a load for more columns of W: W^T F of a force, the place of its shape of a prescribed pressure."""
    if not term.fixes:
        return np.asarray(term.vectors.T @ columns).T
    out = np.zeros((columns.shape[1], term.vectors.shape[1]))
    if prescribed:
        for column, vector in enumerate(dense(term.vectors).T):
            out[np.flatnonzero((columns == vector[:, None]).all(axis=0))[0], column] = 1.0
    return out


def _constant(value: Any) -> Callable[[], Any]:
    return lambda: value


def dense(matrix: Any) -> Floats:
    """A sparse matrix as an array; an array as it is."""
    return np.asarray(matrix if isinstance(matrix, np.ndarray) else matrix.toarray())


@dataclass(frozen=True, eq=False)
class Stack:
    """Dense matrices (terms, n, n) of a projected system."""

    matrices: Floats

    def combine(self, phi: Complex) -> Complex:
        """sum_j phi_j A_j, real and imaginary part apart: the matrices are real."""
        return np.asarray(np.tensordot(phi.real, self.matrices, axes=1) + 1j * np.tensordot(phi.imag, self.matrices, axes=1))


@dataclass(frozen=True, eq=False)
class Pattern:
    """One sparsity pattern for all frequencies: where each term's entries go (None: everywhere), and what is factorised.

    core        pattern of what a direct solver is given, on the free unknowns, CSC: the lower triangle where A is
                symmetric, the whole matrix otherwise
    core_slots  where its entries stand in A's
    """

    indptr: Ints
    indices: Ints
    slots: tuple[Ints | None, ...]
    matrices: tuple[sp.csr_matrix, ...]
    core: sp.csc_matrix
    core_slots: Ints

    @property
    def nnz(self) -> int:
        return len(self.indices)

    def combine(self, phi: Complex) -> sp.csr_matrix:
        """sum_j phi_j A_j."""
        data = np.zeros(self.nnz, dtype=np.complex128)
        for coefficient, matrix, slots in zip(phi, self.matrices, self.slots, strict=True):
            if slots is None:
                data += coefficient * matrix.data
            else:
                data[slots] += coefficient * matrix.data
        n = len(self.indptr) - 1
        return sp.csr_matrix((data, self.indices, self.indptr), shape=(n, n))

    @classmethod
    def of(cls, matrices: tuple[sp.csr_matrix, ...], free: npt.NDArray[np.bool_], symmetric: bool) -> Pattern:
        n = len(free)
        keys = [_keys(matrix) for matrix in matrices]
        union = keys[0]
        if any(not _within(key, union) for key in keys[1:]):
            union = _keys(sum((_ones(matrix) for matrix in matrices[1:]), _ones(matrices[0])).tocsr())
        rows, columns = union // n, union % n
        indptr = np.searchsorted(rows, np.arange(n + 1))
        core, slots = _core(rows, columns, free, symmetric)
        return cls(indptr, columns, tuple(_slots(union, key) for key in keys), matrices, core, slots)


def _core(rows: Ints, columns: Ints, free: npt.NDArray[np.bool_], symmetric: bool) -> tuple[sp.csc_matrix, Ints]:
    """The part that a direct solver is given. A row of A's upper triangle is, by symmetry, a column of the lower one."""
    kept = free[rows] & free[columns] & ((rows <= columns) if symmetric else True)
    slots = np.flatnonzero(kept)
    if not symmetric:  # column by column
        slots = slots[np.lexsort((rows[slots], columns[slots]))]
    number, count = np.cumsum(free) - 1, int(free.sum())
    major, minor = (rows, columns) if symmetric else (columns, rows)
    pointer = np.searchsorted(number[major[slots]], np.arange(count + 1))
    return sp.csc_matrix((np.ones(len(slots)), number[minor[slots]], pointer), shape=(count, count)), slots


def _slots(union: Ints, key: Ints) -> Ints | None:
    """Where a term's entries go; None where it fills the whole pattern, as the volume's do."""
    return None if len(key) == len(union) else np.searchsorted(union, key)


def _within(key: Ints, union: Ints) -> bool:
    """Whether sorted numbers are all among other sorted ones."""
    places = np.minimum(np.searchsorted(union, key), len(union) - 1)
    return bool(np.array_equal(union[places], key))


def _ones(matrix: sp.csr_matrix) -> sp.csr_matrix:
    """Where a matrix has entries: adding such up merges patterns, and nothing cancels."""
    return sp.csr_matrix((np.ones(matrix.nnz), matrix.indices, matrix.indptr), shape=matrix.shape)


def _keys(matrix: sp.csr_matrix) -> Ints:
    matrix.sum_duplicates()
    rows = np.repeat(np.arange(matrix.shape[0], dtype=np.int64), np.diff(matrix.indptr))
    return rows * matrix.shape[1] + matrix.indices


# ---------------------------------------------------------------------------------------------------------------------
# building the sum


def build_system(space: Space, samples: Samples) -> System:
    """The sum of terms of `space.case`, with one output row per receiver sample."""
    case = space.case
    inside = [*_volume_terms(space), *_surface_terms(space), *_sheet_terms(space)]
    terms = [*(replace(term, build=partial(widened, term.build, space, 2)) for term in inside), *_outside_terms(space)]
    sets = tuple(_load_set(space, index) for index in range(len(case.load_cases)))
    receivers, outputs = _outputs(space, samples)
    direct = _direct(space, samples, receivers, outputs) if outputs else None
    return System(space, tuple(terms), sets, receivers, pressure_fixed(space), outputs, direct)


def _direct(
    space: Space, samples: Samples, receivers: Matrix, outputs: Coefficient
) -> Callable[[Floats], tuple[Complex, ...]] | None:
    """At samples outside: p_i(x) - e_x^T u_i, for the integral over the surface takes what is added to p_i alone."""
    loads = [(i, j, load) for i, held in enumerate(space.case.load_cases) for j, load in enumerate(held.loads)]
    waves = [(i, j, *_incident(space, load)) for i, j, load in loads if isinstance(load, IncidentField)]
    if not waves:
        return None
    beyond = np.flatnonzero(samples.tet < 0)
    rows = cache(lambda number: np.asarray(dense(receivers @ waves[number][2]().traces)))

    def direct(f: Floats) -> tuple[Complex, ...]:
        out = tuple(
            np.zeros((len(f), len(samples.tet), len(held.loads)), dtype=np.complex128) for held in space.case.load_cases
        )
        chi = outputs(f)[:, beyond]
        for number, (i, j, incident, region) in enumerate(waves):
            k, rho = _k_rho(space.case, region, f)
            own = incident().at(samples.points[beyond], f, k, rho)
            taken = np.einsum("fsr,rm,fm->fs", chi, rows(number), incident().surface(f, k, rho), optimize=True)
            out[i][:, beyond, j] = own - taken
        return out

    return direct


def _outputs(space: Space, samples: Samples) -> tuple[Matrix, Coefficient | None]:
    """Rows of the samples inside, then those of each sample outside; with what makes outputs of them."""
    inside = samples.tet >= 0
    own = partial(evaluate, space.geometry, space.dofs, samples.tet[inside], samples.bary[inside])
    rows = widened(lambda: own().T, space, 1).T.tocsr()
    outer = [(radiator.region, Exterior(radiator.envelope, space.size)) for radiator in space.envelopes]
    beyond = [_listener(space, outer, samples, int(sample)) for sample in np.flatnonzero(~inside)]
    if not beyond:
        return rows, None

    def chi(f: Floats) -> Complex:
        out = np.zeros(
            (len(f), len(inside), rows.shape[0] + sum(listener.rows.shape[0] for _, listener in beyond)), dtype=np.complex128
        )
        out[:, np.flatnonzero(inside), np.arange(rows.shape[0])] = 1.0
        at = rows.shape[0]
        for sample, (region, listener) in zip(np.flatnonzero(~inside), beyond, strict=True):
            out[:, sample, at : at + listener.rows.shape[0]] = listener.weights(_wave_number(space.case, region, f))
            at += listener.rows.shape[0]
        return out

    return sp.vstack([rows, *(listener.rows for _, listener in beyond)]).tocsr(), chi


def _listener(space: Space, outer: list[tuple[int, Exterior]], samples: Samples, sample: int) -> tuple[int, Listener]:
    """The nearest surface that radiates past a sample, as its region and what is heard from it."""
    point = samples.points[sample]
    found = []
    for region, exterior in outer:
        if exterior.beyond(point[None])[0]:
            found.append((float(np.linalg.norm(point - exterior.envelope.centre)), region, exterior))
    if not found:
        raise not_in_fluid(space.case.receivers[samples.receiver[sample]], point, space.geometry)
    _, region, exterior = min(found, key=lambda each: each[0])
    k = _wave_number(space.case, region, space.case.sweep.frequencies).real
    return region, Listener.at(exterior, point, float(k.min()), float(k.max()))


def _wave_number(case: Case, region: int, f: Floats) -> Complex:
    """w/c (nf,) [1/m] with all losses."""
    return _k_rho(case, region, f)[0]


def widened(build: Callable[[], Matrix], space: Space, axes: int) -> Matrix:
    """A matrix on the unknowns of the mesh, with empty rows (and columns) for those of the outside."""
    matrix = build()
    if space.size == space.dofs.n_dofs:
        return matrix
    out = matrix.tocsr().copy()
    out.resize((space.size, space.size if axes == 2 else matrix.shape[1]))
    return out if axes == 2 else out.tocsc()


def _outside_terms(space: Space) -> list[Term]:
    """(1/rho) (K + i (w/c) C - (w/c)^2 M) of the infinite elements."""
    terms = []
    for outer in space.envelopes:
        build = cache(partial(outer.envelope.matrices, space.size))
        for number in range(3):

            def phi(f: Floats, region: int = outer.region, number: int = number) -> Complex:
                medium = space.case.regions[region]
                rho, c = damped(medium.medium, medium.damping, f)
                return np.asarray((1.0, 1j, -1.0)[number] * (2 * np.pi * f / c) ** number / rho)

            terms.append(Term(f"radiated/{outer.name}", phi, partial(_nth, build, number), symmetric=number == 2))
    return terms


def _nth(build: Callable[[], tuple[Matrix, ...]], number: int) -> Matrix:
    return build()[number]


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

        @cache
        def matrices(tets: Ints = tets) -> tuple[sp.csr_matrix, sp.csr_matrix]:
            return volume_matrices(space.geometry, space.dofs, tets)

        def phi_k(f: Floats, region: Region = region) -> Complex:
            return np.asarray(1.0 / damped(region.medium, region.damping, f)[0])

        def phi_m(f: Floats, region: Region = region) -> Complex:
            rho, c = damped(region.medium, region.damping, f)
            return np.asarray(-((2 * np.pi * f) ** 2) / (rho * c**2))

        label = f"volume/{region.name}"
        terms += [Term(label, phi, partial(_part, matrices, i), 2 * i) for i, phi in enumerate((phi_k, phi_m))]
    return terms


def _part(both: Callable[[], tuple[Matrix, Matrix]], number: int) -> Matrix:
    return both()[number]


def side_admittance(case: Case, side: Side, f: Floats) -> Complex | None:
    """Y (nf,) of one side of a surface: its kind's, or the residual absorption of a hard wall; None where it is hard."""
    near = adjacent(case, side.region, f)
    own = side.boundary.admittance(f, near)
    if own is None and side.boundary.hard:
        own = case.regions[side.region].damping.hard_wall_admittance(f, near.fluid)
        return own if np.any(own) else None
    return own


def _surface_terms(space: Space) -> list[Term]:
    case, terms = space.case, []
    for side in space.sides:
        if side_admittance(case, side, case.sweep.frequencies) is None:
            continue

        def phi(f: Floats, side: Side = side) -> Complex:
            return _i_w(f, side_admittance(case, side, f))

        build = partial(surface_mass, space.geometry, space.dofs, side.tet, side.face)
        terms.append(Term(f"surface/{case.surfaces[side.surface].name}", phi, build))
    return terms


def _sheet_terms(space: Space) -> list[Term]:
    """i w Y_t [B_aa, -B_ab; -B_ba, B_bb]: air passes in proportion to the pressure difference."""
    case, terms = space.case, []
    for pair in space.sheets:
        boundary = case.surfaces[pair.surface].boundary
        if _transfer(case, boundary, pair.region, case.sweep.frequencies) is None:
            continue

        def phi(f: Floats, boundary: Boundary = boundary, region: int = pair.region) -> Complex:
            return _i_w(f, _transfer(case, boundary, region, f))

        terms.append(Term(f"surface/{case.surfaces[pair.surface].name}", phi, partial(_jump_mass, space, pair)))
    return terms


def _jump_mass(space: Space, pair: SheetPair) -> Matrix:
    cross = surface_cross_mass(space.geometry, space.dofs, pair.front, pair.back)
    own = [surface_mass(space.geometry, space.dofs, *side) for side in (pair.front, pair.back)]
    return (own[0] + own[1] - cross - cross.T).tocsr()


def _i_w(f: Floats, admittance: Complex | None) -> Complex:
    """i w Y (nf,); zero where the surface is hard at these frequencies."""
    return np.zeros(len(f), dtype=np.complex128) if admittance is None else 2j * np.pi * f * admittance


def _transfer(case: Case, boundary: Boundary, region: int, f: Floats) -> Complex | None:
    return boundary.transfer_admittance(f, adjacent(case, region, f))


def pressure_fixed(space: Space) -> npt.NDArray[np.bool_]:
    """Which unknowns (n,) a surface of kind `pressure` constrains."""
    fixed = np.zeros(space.size, dtype=bool)
    for side in space.sides:
        if side.boundary.fixes_pressure:
            fixed[face_dofs(space.dofs, side.tet, side.face)] = True
    for outer in space.envelopes:
        fixed[outer.envelope.numbers[outer.envelope.held]] = True
    return fixed


# ---------------------------------------------------------------------------------------------------------------------
# loads


def _load_set(space: Space, index: int) -> LoadSet:
    load_case = space.case.load_cases[index]
    found = [term for load in load_case.loads for term in _load_terms(space, load)]
    terms = [replace(term, build=partial(widened, term.build, space, 1)) for term in found]
    from_outside = any(isinstance(load, IncidentField) for load in load_case.loads)
    return LoadSet(load_case.name, tuple(load.name for load in load_case.loads), tuple(terms), from_outside)


def _load_terms(space: Space, load: Load) -> list[LoadTerm]:
    match load:
        case SurfaceVelocity():
            return _velocity_terms(space, load)
        case SurfacePressure():
            return _pressure_terms(space, load)
        case IncomingWave():
            return _wave_terms(space, load)
        case Monopole():
            return [_monopole_term(space, load)]
        case IncidentField():
            return [_incident_term(space, load)]
    raise CaseError(f"a load of kind '{load.kind_name}' cannot be assembled")  # pragma: no cover


def _loaded_sides(space: Space, load: Load) -> tuple[Side, ...]:
    index = [surface.name for surface in space.case.surfaces].index(load.acts_on)
    sides = space.sides_of(index)
    if not sides:
        raise MeshError(f"surfaces/{load.acts_on} carries a load but has no triangle; check its physical group")
    return sides


def _moving_sides(space: Space, load: SurfaceVelocity) -> tuple[Side, ...]:
    """The sides a velocity drives: an absorbing side of a sheet does not move with it."""
    return tuple(side for side in _loaded_sides(space, load) if side.boundary.moves or side.boundary.hard)


def _velocity_terms(space: Space, load: SurfaceVelocity) -> list[LoadTerm]:
    terms = []
    for side in _moving_sides(space, load):

        def psi(f: Floats, side: Side = side) -> Complex:
            drive = side.boundary.drive(f, adjacent(space.case, side.region, f))
            factor = -2j * np.pi * f * side.sign * drive * load.cut_factor(f)
            return np.asarray(factor[:, None] * load.motion.outward(f))

        terms.append(LoadTerm(load.name, psi, partial(_shape_vectors, space, side, load.motion)))
    return terms


def _shape_vectors(space: Space, side: Side, motion: Motion) -> sp.csc_matrix:
    """integral q shape_m dS as columns (n, m)."""
    shape = motion.shape()
    geometry, dofs = space.geometry, space.dofs
    if shape is None:
        return _uniform_vector(space, side)
    if isinstance(shape, str):
        function = parse(shape)
        return _column(surface_load(geometry, dofs, side.tet, side.face, lambda x: function(x[:, 0], x[:, 1], x[:, 2])))
    load = surface_load(
        geometry, dofs, side.tet, side.face, lambda x: interpolation(shape, x).weights.toarray(), degree=space.order + 4
    )
    return sp.csc_matrix(load)


def _uniform_vector(space: Space, side: Side) -> sp.csc_matrix:
    """integral q dS as one column (n, 1)."""
    return _column(surface_load(space.geometry, space.dofs, side.tet, side.face, None))


def uncovered_area(space: Space, load: SurfaceVelocity) -> float:
    """Area [m2] of a load's surface that no scan point covers; front and back of a sheet are one area."""
    bare = {1: 0.0, -1: 0.0}
    shape = load.motion.shape()
    if shape is None or isinstance(shape, str):
        return 0.0
    for side in _moving_sides(space, load):
        points, weights, _ = surface_points(space.geometry, side.tet, side.face, 4)
        bare[side.sign] += float(weights[~interpolation(shape, points).covered].sum())
    return max(bare.values())


def _column(vector: npt.NDArray[Any]) -> sp.csc_matrix:
    return sp.csc_matrix(np.asarray(vector, dtype=np.float64)[:, None])


def _pressure_terms(space: Space, load: SurfacePressure) -> list[LoadTerm]:
    """A uniform pressure is carried by the vertex unknowns alone: they sum to one, the others vanish at vertices.

    Where surfaces of kind `pressure` meet, each gives its part: the line between them takes the mean of their pressures.
    """

    def build() -> sp.csc_matrix:
        meeting = np.zeros(space.dofs.n_dofs)
        for index in {side.surface for side in space.sides if side.boundary.fixes_pressure}:
            meeting += _on_vertices(space, space.sides_of(index))
        return _column(_on_vertices(space, _loaded_sides(space, load)) / np.maximum(meeting, 1.0))

    return [LoadTerm(load.name, lambda f: as_spectrum(load.pressure).at(f)[:, None], build, fixes=True)]


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

        terms.append(LoadTerm(load.name, psi, partial(_uniform_vector, space, side)))
    return terms


def _incident_term(space: Space, load: IncidentField) -> LoadTerm:
    incident, region = _incident(space, load)
    return LoadTerm(load.name, lambda f: incident().weights(f, *_k_rho(space.case, region, f)), lambda: incident().vectors)


def _incident(space: Space, load: IncidentField) -> tuple[Callable[[], Incident], int]:
    """A field from outside on the one surface that radiates, worked out when it is first asked for, and its region."""
    if len(space.envelopes) != 1:
        raise CaseError(
            f"the load '{load.name}' comes from outside and needs one surface of kind 'radiating', but the case has "
            f"{len(space.envelopes)}; wrap the model in one, or take the load out"
        )
    outer = space.envelopes[0]
    exterior = Exterior(outer.envelope, space.size)
    if isinstance(load, OutsideMonopole) and not exterior.beyond(np.array([load.position]))[0]:
        raise CaseError(
            f"the source '{load.name}' at {load.position} m does not lie beyond '{outer.name}'; expected a place outside of "
            "it: move it, or make it a 'monopole' if it is inside"
        )
    k = _wave_number(space.case, outer.region, space.case.sweep.frequencies).real
    return cache(partial(Incident.of, load, exterior, float(k.min()), float(k.max()))), outer.region


def _k_rho(case: Case, region: int, f: Floats) -> tuple[Complex, Complex]:
    """w/c (nf,) [1/m] and rho (nf,) of a region with all losses."""
    rho, c = damped(case.regions[region].medium, case.regions[region].damping, f)
    return np.asarray(2 * np.pi * f / c), np.asarray(rho)


def _monopole_term(space: Space, load: Monopole) -> LoadTerm:
    point = np.array([load.position])
    tet, bary = space.geometry.locate(point)
    if tet[0] < 0:
        near = space.geometry.nearest_point(point[0])
        raise CaseError(
            f"the source '{load.name}' at {load.position} lies outside every region; the nearest point of the fluid is "
            f"({near[0]:.4g}, {near[1]:.4g}, {near[2]:.4g}); a source beyond a surface that radiates is an 'outside_monopole'"
        )

    def psi(f: Floats) -> Complex:
        return np.asarray((2j * np.pi * f * as_spectrum(load.volume_velocity).at(f))[:, None])

    return LoadTerm(load.name, psi, lambda: evaluate(space.geometry, space.dofs, tet, bary).T.tocsc())
