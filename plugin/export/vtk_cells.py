"""VTK cells on a lattice, and datasets made of arrays: what the VTK exports share.

An element of order p becomes one Lagrange cell of order p, which holds its polynomial (and a curved geometry of order
2) exactly: a reader that evaluates the cell finds the solver's own values between the points too.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from murmesh.plugin.files import written
from murmesh.plugin.sampling import Cloud, lattice, sample_volume
from murmesh.solver.errors import ResultError
from murmesh.solver.space import Space

if TYPE_CHECKING:
    from vtkmodules.vtkCommonCore import vtkPoints
    from vtkmodules.vtkCommonDataModel import vtkCellArray, vtkDataObject, vtkDataSet

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
VTK_TETRA, VTK_LAGRANGE_TETRAHEDRON = 10, 71  # vtkCellType.h


@dataclass(frozen=True, eq=False)
class Cells:
    """Cells of one kind: `nodes` (t, k) into the cloud, in VTK's order."""

    cloud: Cloud
    kind: int
    nodes: Ints

    @property
    def offsets(self) -> Ints:
        """Where each cell begins in the flattened nodes, and their number, (t + 1,)."""
        return np.asarray(np.arange(len(self.nodes) + 1) * self.nodes.shape[1], dtype=np.int64)


def volume_cells(space: Space, flat: bool = False) -> Cells:
    """One Lagrange cell per element at the order of the solution; or `flat`: p^3 linear cells per element."""
    curved = bool(space.geometry.curved.any())
    n = max(space.order, 2 if curved else 1)
    volume = sample_volume(space, n)
    if flat or n == 1:
        return Cells(volume.cloud, VTK_TETRA, volume.flat_tets)
    right, left = (_vtk_order(n, corners) for corners in ((0, 1, 2, 3), (0, 1, 3, 2)))
    x = volume.cloud.points[volume.nodes[:, :4]]
    positive = np.linalg.det(x[:, 1:] - x[:, :1]) > 0
    nodes = np.where(positive[:, None], volume.nodes[:, right], volume.nodes[:, left])
    return Cells(volume.cloud, VTK_LAGRANGE_TETRAHEDRON, nodes)


@cache
def _vtk_order(n: int, corners: tuple[int, int, int, int]) -> Ints:
    """Lattice numbers in the order of VTK's Lagrange tetrahedron whose corners are these sorted corners."""
    from vtkmodules.vtkCommonDataModel import vtkLagrangeTetra

    number = {tuple(row): k for k, row in enumerate(lattice(n).tolist())}
    cell = vtkLagrangeTetra()
    cell.GetPointIds().SetNumberOfIds(len(number))
    cell.GetPoints().SetNumberOfPoints(len(number))
    cell.Initialize()
    out = []
    for index in range(len(number)):
        weights = [0, 0, 0, 0]
        cell.ToBarycentricIndex(index, weights)
        # VTK counts the first corner's weight last
        mine = np.zeros(4, dtype=np.int64)
        mine[list(corners)] = [weights[3], *weights[:3]]
        out.append(number[tuple(mine.tolist())])
    return np.array(out)


def unstructured_grid(cells: Cells, arrays: dict[str, Floats], words: dict[str, str]) -> vtkDataSet:
    """A vtkUnstructuredGrid with point arrays and texts as field data."""
    from vtkmodules.vtkCommonDataModel import vtkUnstructuredGrid

    grid = vtkUnstructuredGrid()
    grid.SetPoints(_points(cells.cloud.points))
    grid.SetCells(cells.kind, _cell_array(cells.nodes))
    return _dressed(grid, arrays, words)


def surface_mesh(
    points: Floats, triangles: Ints, arrays: dict[str, Floats], words: dict[str, str], cells: dict[str, Floats] | None = None
) -> vtkDataSet:
    """A vtkPolyData of triangles with point arrays, cell arrays and texts as field data."""
    from vtkmodules.vtkCommonDataModel import vtkPolyData

    mesh = vtkPolyData()
    mesh.SetPoints(_points(points))
    mesh.SetPolys(_cell_array(triangles))
    for name, values in (cells or {}).items():
        array = _vtk_array(values)
        array.SetName(name)
        mesh.GetCellData().AddArray(array)
    return _dressed(mesh, arrays, words)


def uniform_grid(origin: Floats, step: float, counts: Ints, arrays: dict[str, Floats], words: dict[str, str]) -> vtkDataSet:
    """A vtkImageData with point arrays, x running fastest, and texts as field data."""
    from vtkmodules.vtkCommonDataModel import vtkImageData

    grid = vtkImageData()
    grid.SetOrigin(*origin)
    grid.SetSpacing(step, step, step)
    grid.SetDimensions(*(int(n) for n in counts))
    return _dressed(grid, arrays, words)


def write_xml(data: vtkDataObject, path: Path) -> Path:
    """Write VTK's XML file of a dataset or of blocks, whole or not at all.

    Raises: ResultError where it could not be written.
    """
    from vtkmodules import vtkIOXML

    kind = data.GetClassName().removeprefix("vtk").removesuffix("Set")  # blocks are written by vtkXMLMultiBlockDataWriter
    with written(path) as scratch:
        writer: Any = getattr(vtkIOXML, f"vtkXML{kind}Writer")()
        writer.SetFileName(str(scratch))
        writer.SetInputData(data)
        if not writer.Write():
            raise ResultError(f"'{path}' could not be written; check the space left in its folder")
    return Path(path)


def _vtk_array(values: npt.NDArray[np.generic]) -> Any:
    """A copy as a VTK array: of ids for integers."""
    from vtkmodules.util import numpy_support

    make: Any = numpy_support.numpy_to_vtkIdTypeArray if values.dtype.kind == "i" else numpy_support.numpy_to_vtk
    return make(np.ascontiguousarray(values), deep=True)


def _points(points: Floats) -> vtkPoints:
    from vtkmodules.vtkCommonCore import vtkPoints

    held = vtkPoints()
    held.SetData(_vtk_array(points))
    return held


def _cell_array(nodes: Ints) -> vtkCellArray:
    from vtkmodules.vtkCommonDataModel import vtkCellArray

    cells = vtkCellArray()
    offsets = np.arange(len(nodes) + 1, dtype=np.int64) * nodes.shape[1]
    cells.SetData(_vtk_array(offsets), _vtk_array(nodes.ravel()))
    return cells


def _dressed(mesh: vtkDataSet, arrays: dict[str, Floats], words: dict[str, str]) -> vtkDataSet:
    for name, values in arrays.items():
        array = _vtk_array(values)
        array.SetName(name)
        mesh.GetPointData().AddArray(array)
    if "level_db" in arrays:
        mesh.GetPointData().SetActiveScalars("level_db")
    add_words(mesh, words)
    return mesh


def add_words(target: vtkDataObject, words: dict[str, str]) -> None:
    """Texts as string arrays in the field data."""
    from vtkmodules.vtkCommonCore import vtkStringArray

    for name, text in words.items():
        array = vtkStringArray()
        array.SetName(name)
        array.InsertNextValue(text)
        target.GetFieldData().AddArray(array)
