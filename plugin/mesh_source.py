"""Where meshes come from: the current gmsh model, a gmsh script, CAD, .msh, or whatever meshio reads with named sets.

Everything ends as a `TaggedMesh`: tetrahedra and triangles of order 1 or 2 with named, possibly overlapping groups.
Nothing is judged here beyond what cannot be read; `check` says what is wrong with it and `model` makes a case of it.
"""

from __future__ import annotations

import contextlib
import io
import math
import re
import warnings
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from murmesh.plugin.gmsh_session import CAD, current_gmsh, generate, gmsh_session, group_name, open_model
from murmesh.plugin.probe import gmsh_missing
from murmesh.plugin.wrapping import Wrap, wrap_model
from murmesh.solver.errors import CaseError, FormatError, MeshError, nearest

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Block = tuple[npt.NDArray[Any], tuple[str, ...]]
"""Cells (n, k) and the names of the groups they all belong to."""

UNITS = {"m": 1.0, "dm": 0.1, "cm": 0.01, "mm": 1e-3, "um": 1e-6, "in": 0.0254, "ft": 0.3048}
LARGEST, SMALLEST = 100.0, 0.05
"""Extents [m] outside which a unit is more likely wrong than meant (common practice, no source)."""
JOB_ATTRIBUTE = "murmesh job"
BY_GMSH = {".msh", ".geo", ".geo_unrolled", ".step", ".stp", ".brep", ".py", ".unv"}
MEAN_EDGE = 1.5
"""The 95 % quantile of the mean edges of a gmsh mesh over its size (measured on a cab and a cylinder, 1.4 .. 1.5)."""
_VTK_ORDER = np.array([0, 1, 2, 3, 4, 5, 6, 7, 9, 8])  # gmsh numbers the last two mid-edge nodes the other way round
_LINEAR = {"tetrahedron": "tetra", "triangle": "triangle", "quadrangle": "quad"}


@dataclass(frozen=True, eq=False)
class TaggedMesh:
    """A mesh with named groups, as it was read.

    nodes (n, 3) [m]; tets (t, 4|10) and triangles (m, 3|6), mid-edge nodes in the order 01, 12, 02, 03, 13, 23;
    groups: indices of tets or triangles by name, sorted, empty where the group holds no cell of its dimension.
    """

    nodes: Floats
    tets: Ints
    tet_groups: Mapping[str, Ints]
    triangles: Ints
    triangle_groups: Mapping[str, Ints]
    other_cells: Mapping[str, int] = field(default_factory=dict)
    """Counts of cells that the solver does not know, by name: hexahedra, prisms, order above 2 ..."""
    other_groups: Mapping[str, int] = field(default_factory=dict)
    """Dimension (0 or 1) of groups of points and curves."""
    source: str = "a mesh"
    job: str = ""
    """The job text that the mesh carries, or nothing."""

    @property
    def extent(self) -> float:
        """Largest extent along an axis [m]."""
        return float(np.ptp(self.nodes, axis=0).max()) if len(self.nodes) else 0.0

    def scaled(self, factor: float) -> TaggedMesh:
        """The same mesh with its coordinates multiplied by `factor`."""
        return self if factor == 1.0 else replace(self, nodes=self.nodes * factor)


def tagged_mesh(nodes: npt.ArrayLike, tets: Iterable[Block], triangles: Iterable[Block], **rest: Any) -> TaggedMesh:
    """Put blocks of cells together; a cell that comes twice (once per group) is kept once, in both groups."""
    points = np.asarray(nodes, dtype=np.float64).reshape(-1, 3)
    tet_cells, tet_groups = _merge(list(tets), 4, len(points))
    triangle_cells, triangle_groups = _merge(list(triangles), 3, len(points))
    return TaggedMesh(points, tet_cells, tet_groups, triangle_cells, triangle_groups, **rest)


def cell_keys(cells: Ints, nodes: int) -> npt.NDArray[np.uint64]:
    """A 64-bit key per row that does not depend on the order of its nodes.

    The sum of one random number per node: two different rows among a million share a key with probability 3e-8.
    """
    salt = np.random.default_rng(20).integers(0, 2**63, size=max(nodes, 1), dtype=np.uint64)
    return np.asarray(salt[cells].sum(axis=1, dtype=np.uint64))


def _merge(blocks: list[Block], corners: int, nodes: int) -> tuple[Ints, dict[str, Ints]]:
    filled = [cells for cells, _ in blocks if len(cells)]
    width = min((cells.shape[1] for cells in filled), default=corners)
    if corners == 4 and any(cells.shape[1] != width for cells in filled):
        raise MeshError("the mesh mixes tetrahedra of order 1 and 2; give all of them the same order (setOrder)")
    rows = [np.asarray(cells, dtype=np.int64)[:, :width] for cells in filled] or [np.empty((0, width), np.int64)]
    cells = np.concatenate(rows)
    first, number = _distinct(cells[:, :corners], nodes)
    start = 0
    members: dict[str, list[Ints]] = {}
    for held, names in blocks:
        for name in names:
            members.setdefault(name, []).append(number[start : start + len(held)])
        start += len(held)
    return cells[first], {name: np.unique(np.concatenate(parts)) for name, parts in members.items()}


def _distinct(cells: Ints, nodes: int) -> tuple[Ints, Ints]:
    """Rows that come for the first time, in order, and for every row its number among them."""
    _, first, inverse = np.unique(cell_keys(cells, nodes), return_index=True, return_inverse=True)
    order = np.argsort(first)
    return first[order], np.argsort(order)[inverse.reshape(-1)]


# ---------------------------------------------------------------------------------------------------------------------
# the current gmsh model


def from_gmsh(source: str = "the current gmsh model") -> TaggedMesh:
    """The mesh and the physical groups of the current gmsh model, in metres as they stand.

    Raises MissingLibraryError without gmsh, and MeshError if gmsh holds no model.
    """
    gmsh = current_gmsh()
    tags, flat, _ = gmsh.model.mesh.getNodes()
    order = np.argsort(tags)
    other: dict[str, int] = {}
    tets = _gmsh_blocks(gmsh, 3, {4: 4, 11: 10}, tags, order, other)
    triangles = _gmsh_blocks(gmsh, 2, {2: 3, 9: 6}, tags, order, other)
    low = {group_name(gmsh, dim, tag): dim for d in (0, 1) for dim, tag in gmsh.model.getPhysicalGroups(d)}
    job = "".join(gmsh.model.getAttribute(JOB_ATTRIBUTE)) if JOB_ATTRIBUTE in gmsh.model.getAttributeNames() else ""
    return tagged_mesh(flat, tets, triangles, other_cells=other, other_groups=low, source=source, job=job)


def _gmsh_blocks(gmsh: Any, dim: int, known: Mapping[int, int], tags: Any, order: Any, other: dict[str, int]) -> list[Block]:
    blocks: list[Block] = [
        (np.empty((0, dim + 1), dtype=np.int64), (group_name(gmsh, dim, tag),)) for _, tag in gmsh.model.getPhysicalGroups(dim)
    ]
    for _, entity in gmsh.model.getEntities(dim):
        names = tuple(group_name(gmsh, dim, tag) for tag in gmsh.model.getPhysicalGroupsForEntity(dim, entity))
        for kind in gmsh.model.mesh.getElementTypes(dim, entity):
            numbers, nodes = gmsh.model.mesh.getElementsByType(kind, entity)
            if kind not in known:
                name = _cell_name(gmsh, kind)
                other[name] = other.get(name, 0) + len(numbers)
                continue
            cells = order[np.searchsorted(tags, nodes, sorter=order)].reshape(-1, known[kind])
            blocks.append((cells[:, _VTK_ORDER] if known[kind] == 10 else cells, names))
    return blocks


def _cell_name(gmsh: Any, kind: int) -> str:
    name, _, order, _, _, _ = gmsh.model.mesh.getElementProperties(kind)
    plain = str(name).split()[0].lower()
    return plain if order == 1 else f"{plain} of order {order}"


# ---------------------------------------------------------------------------------------------------------------------
# files


def read_mesh(
    path: str | Path, *, size: float | None = None, unit: str | None = None, order: int = 0, wrap: Wrap | None = None
) -> TaggedMesh:
    """The tagged mesh in `path`; geometry (.py, .geo, .step, .brep) is meshed with elements of at most `size` [m].

    `unit` says what one unit of the file's coordinates is; None takes them as metres (a STEP file states its own unit).
    `order` 1 or 2 is that of the geometry where it is meshed here; 0 takes 2 if a surface is curved. `wrap` puts air around
    geometry before it is meshed.
    Raises FormatError for what cannot be read, CaseError where the size shows that the unit must be stated.
    """
    path = Path(path)
    if not path.is_file():
        raise FormatError(f"there is no file '{path}'; check the path")
    if unit is not None and unit not in UNITS:
        raise CaseError(f"unit '{unit}' is not known; {nearest(unit, UNITS)}")
    suffix = path.suffix.lower()
    if suffix in BY_GMSH and not (suffix == ".msh" and gmsh_missing()):
        mesh = _by_gmsh(path, size, unit, order, wrap)
    elif wrap is not None:
        raise CaseError(f"'{path}' is a mesh, which cannot be wrapped; give its geometry, a gmsh script, .geo, STEP or BREP")
    else:
        mesh = _by_meshio(path).scaled(UNITS[unit or "m"])
    if unit is None:
        _require_plausible(mesh.extent, path)
    return mesh


def _by_gmsh(path: Path, size: float | None, unit: str | None, order: int, wrap: Wrap | None) -> TaggedMesh:
    with gmsh_session():
        factor = open_model(path, size, unit, UNITS)
        if unit is None:
            require_unit(path, factor)
        if wrap is not None:
            wrap_model(wrap, factor)
        generate(path, None if size is None else size / factor, order)
        return from_gmsh(str(path)).scaled(factor)


def require_unit(path: Path, factor: float) -> None:
    """CaseError where the size of the open geometry (one unit `factor` metres) shows that its unit must be stated.

    Asked before meshing: elements for 300 Hz in a booth of 2000 m would never end.
    """
    if path.suffix.lower() not in CAD:
        return
    box = np.reshape(current_gmsh().model.getBoundingBox(-1, -1), (2, 3))
    _require_plausible(factor * float(np.ptp(box, axis=0).max()), path, cad=True)


def _require_plausible(extent: float, path: Path, cad: bool = False) -> None:
    if extent > LARGEST or (cad and extent < SMALLEST):
        raise CaseError(
            f"'{path}' is {extent:.4g} m long if its own unit is believed; expected {SMALLEST:g} .. {LARGEST:g} m: "
            'state the unit of its coordinates, e.g. unit = "mm" (or unit = "m" if the model really has this size)'
        )


def _by_meshio(path: Path) -> TaggedMesh:
    """meshio prints, and ends some errors with SystemExit: both are caught."""
    import meshio

    said = io.StringIO()
    try:
        with contextlib.redirect_stdout(said), contextlib.redirect_stderr(said), warnings.catch_warnings():
            warnings.simplefilter("ignore")
            mesh = meshio.read(path)
    except (Exception, SystemExit) as error:
        words = " ".join((str(error) + " " + said.getvalue()).split())[-300:]
        raise FormatError(f"'{path}' cannot be read as a mesh: {words}; export it as .msh with named groups") from None
    if not len(mesh.points) or not mesh.cells:
        raise FormatError(f"'{path}' holds no cells; export the mesh anew, for instance as .msh with named groups")
    return from_meshio(mesh, str(path), _attribute_in(path))


def from_meshio(mesh: Any, source: str = "a mesh", job: str = "") -> TaggedMesh:
    """The tagged mesh of a meshio mesh; groups are its named sets, physical names and cell tags."""
    parts: dict[int, list[Block]] = {2: [], 3: []}
    other: dict[str, int] = {}
    low: dict[str, int] = {}
    for index, block in enumerate(mesh.cells):
        dim = {"tetra": 3, "tetra10": 3, "triangle": 2, "triangle6": 2}.get(block.type)
        labels = _labels(mesh, index, len(block.data))
        if dim is not None:
            parts[dim] += _blocks_of(np.asarray(block.data), labels)
        elif block.type.startswith(("vertex", "line")):
            low.update({name: int(block.type.startswith("line")) for name in labels})
        else:
            other[block.type] = other.get(block.type, 0) + len(block.data)
    empty = [(np.empty((0, 3), np.int64), (n,)) for n, (_, dim) in _physical(mesh).items() if dim == 2]
    nodes = np.zeros((len(mesh.points), 3))
    nodes[:, : mesh.points.shape[1]] = mesh.points
    return tagged_mesh(nodes, parts[3], [*empty, *parts[2]], other_cells=other, other_groups=low, source=source, job=job)


def _blocks_of(cells: Ints, labels: Mapping[str, Ints]) -> list[Block]:
    return [(cells, ()), *((cells[rows], (name,)) for name, rows in labels.items())]


def _physical(mesh: Any) -> dict[str, tuple[int, int]]:
    return {str(name).strip(): (int(held[0]), int(held[1])) for name, held in mesh.field_data.items() if len(held) == 2}


def _labels(mesh: Any, index: int, count: int) -> dict[str, Ints]:
    """Rows of one block by group name."""
    rows: dict[str, Ints] = {}
    for name, sets in mesh.cell_sets.items():
        held = sets[index]
        if not name.startswith("gmsh:") and held is not None and len(held):
            rows[name.strip()] = np.asarray(held, dtype=np.int64)
    for name, number in _numbered(mesh, index, count):
        rows.setdefault(name, number)
    return rows


def _numbered(mesh: Any, index: int, count: int) -> Iterable[tuple[str, Ints]]:
    """Groups that the file keeps as a number per cell."""
    dim = _dimension(mesh.cells[index].type)
    names: dict[int, list[str]] = {}
    for name, (number, d) in _physical(mesh).items():
        if d == dim:
            names.setdefault(number, []).append(name)
    for tag, held in getattr(mesh, "cell_tags", {}).items():
        names.setdefault(int(tag), []).extend(str(name).strip() for name in held)
    for key in ("gmsh:physical", "cell_tags"):
        if key in mesh.cell_data:
            values = np.asarray(mesh.cell_data[key][index]).reshape(count)
            for number in np.unique(values[values != 0]):
                for name in names.get(int(number), [f"{('point', 'curve', 'surface', 'volume')[dim]}_{number}"]):
                    yield name, np.flatnonzero(values == number)


def _dimension(cell: str) -> int:
    if cell.startswith("vertex"):
        return 0
    return 1 if cell.startswith("line") else 2 if cell.startswith(("triangle", "quad")) else 3


def job_stored_in(content: bytes, job: str) -> bytes:
    """The bytes of a .msh file with `job` (one line) in it, in place of the job it carried; nothing else is touched."""
    name = JOB_ATTRIBUTE.encode()
    section = b"$%s\n%s\n$End%s\n" % (name, job.encode("utf-8"), name)
    pattern = rb"\$" + name + rb"\r?\n.*?\$End" + name + rb"\r?\n?"
    return re.sub(pattern, b"", content, flags=re.DOTALL).rstrip(b"\r\n") + b"\n" + section


def _attribute_in(path: Path) -> str:
    """The job that gmsh stored in a .msh, found without gmsh."""
    if path.suffix.lower() != ".msh":
        return ""
    pattern = rb"\$" + JOB_ATTRIBUTE.encode() + rb"\r?\n(.*?)\r?\n\$End" + JOB_ATTRIBUTE.encode()
    match = re.search(pattern, path.read_bytes(), re.DOTALL)
    return match.group(1).decode("utf-8") if match else ""


# ---------------------------------------------------------------------------------------------------------------------
# element size


def element_size(top_frequency: float, speed: float, order: int = 4, accuracy_db: float = 0.1) -> float:
    """The element size [m] for gmsh whose a-priori error at `top_frequency` [Hz] and `order` is `accuracy_db`.

    Inverts `solver.orders.a_priori_error`; `speed` [m/s] is the lowest speed of sound in the model.
    """
    if not (top_frequency > 0 and speed > 0 and accuracy_db > 0 and 1 <= order <= 8):
        raise CaseError(
            f"element size for {top_frequency:g} Hz, {speed:g} m/s, order {order}, {accuracy_db:g} dB: give positive "
            "numbers and an order from 1 to 8"
        )
    kh = 4 * (accuracy_db * math.factorial(order + 1) / (8.686 * 2)) ** (1 / (order + 1))
    return float(kh * speed / (2 * math.pi * top_frequency) / MEAN_EDGE)
