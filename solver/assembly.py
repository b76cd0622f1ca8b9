"""Real, frequency-independent matrices and vectors on tetrahedra, on their faces and at points.

    K = int grad q . grad p dV,   M = int q p dV,   B = int q p dS,   f = int q g dS,   p(x) = sum_i N_i(x) p_i.

The one door to the discretisation: the numbering (`dofs`), the shapes (`elements.geometry`), integrals over tetrahedra
(`volumes`) and over faces (`faces`).  Tetrahedra, local faces and barycentric coordinates are always in the mesh's own
corner order; the sorted order of the basis stays inside.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from murmesh.solver.dofs import DofMap
from murmesh.solver.elements.geometry import Geometry
from murmesh.solver.elements.tetrahedron import basis
from murmesh.solver.errors import MeshError
from murmesh.solver.faces import (
    face_dofs,
    surface_area,
    surface_cross_mass,
    surface_load,
    surface_mass,
    surface_normals,
    surface_points,
)
from murmesh.solver.volumes import mass, stiffness, volume_matrices

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

__all__ = [
    "DofMap",
    "Geometry",
    "evaluate",
    "evaluate_gradient",
    "face_dofs",
    "mass",
    "stiffness",
    "surface_area",
    "surface_cross_mass",
    "surface_load",
    "surface_mass",
    "surface_normals",
    "surface_points",
    "volume_matrices",
]


def evaluate(geometry: Geometry, dofmap: DofMap, tet: npt.ArrayLike, bary: npt.ArrayLike) -> sp.csr_matrix:
    """Rows E (k, n_dofs) with p(x) = E p at bary (k, 4), mesh corner order, of tet (k,).

    Raises: MeshError when a tetrahedron is -1, as `locate` gives for points outside.
    """
    which, lam = _checked(tet, bary)
    values = []
    groups = dofmap.order_groups(which)
    for order, at in groups:
        values.append(basis(order, _sorted(dofmap, which[at], lam[at]))[0])
    return _rows(dofmap, which, groups, values)


def evaluate_gradient(
    geometry: Geometry, dofmap: DofMap, tet: npt.ArrayLike, bary: npt.ArrayLike
) -> tuple[sp.csr_matrix, sp.csr_matrix, sp.csr_matrix]:
    """Rows (k, n_dofs) of dp/dx, dp/dy, dp/dz [1/m] at bary (k, 4), mesh corner order, of tet (k,).

    Raises: MeshError when a tetrahedron is -1, as `locate` gives for points outside.
    """
    which, lam = _checked(tet, bary)
    groups = dofmap.order_groups(which)
    values: tuple[list[Floats], list[Floats], list[Floats]] = ([], [], [])
    for order, at in groups:
        dbary = basis(order, _sorted(dofmap, which[at], lam[at]))[1]
        gradients = geometry.jacobians(which[at], lam[at, None])[0][:, 0]
        ascending = dofmap.topology.sorted_vertices[which[at]]
        own = np.take_along_axis(gradients, ascending[:, :, None], axis=1)
        for axis in range(3):
            values[axis].append(np.einsum("kni,ki->kn", dbary, own[:, :, axis]))
    x, y, z = (_rows(dofmap, which, groups, v) for v in values)
    return x, y, z


def _checked(tet: npt.ArrayLike, bary: npt.ArrayLike) -> tuple[Ints, Floats]:
    which, lam = np.asarray(tet, dtype=np.int64).ravel(), np.asarray(bary, dtype=np.float64).reshape(-1, 4)
    if len(which) != len(lam):
        raise MeshError(f"{len(which)} tetrahedra and {len(lam)} points were given; expected one point per tetrahedron")
    outside = np.count_nonzero(which < 0)
    if outside:
        raise MeshError(
            f"{outside} of {len(which)} points lie in no tetrahedron (-1); expected points inside the mesh: "
            "leave out those that `locate` marks with -1, or move them to `nearest_point`"
        )
    return which, lam


def _sorted(dofmap: DofMap, tet: Ints, bary: Floats) -> Floats:
    return np.take_along_axis(bary, dofmap.topology.sorted_vertices[tet], axis=1)


def _rows(dofmap: DofMap, tet: Ints, groups: list[tuple[int, Ints]], values: list[Floats]) -> sp.csr_matrix:
    """A matrix (k, n_dofs) from the values (m, nloc) of each group of one order."""
    out = sp.csr_matrix((len(tet), dofmap.n_dofs))
    for (_, at), each in zip(groups, values, strict=True):
        dofs = dofmap.element_dofs(tet[at])
        there = dofs >= 0
        row = np.broadcast_to(at[:, None], dofs.shape)[there]
        out = out + sp.csr_matrix((each[there], (row, dofs[there])), shape=out.shape)
    return out
