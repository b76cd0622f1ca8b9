"""VTK unstructured grid (.vtu): the field at one frequency, as p_re, p_im, level_db and phase_deg at points."""

from __future__ import annotations

from pathlib import Path

from murmesh.plugin.export import EXPORTS
from murmesh.plugin.export.arrays import header, point_arrays
from murmesh.plugin.export.vtk_cells import unstructured_grid, volume_cells, write_xml
from murmesh.plugin.fields import kept_line
from murmesh.solver.result import Result


@EXPORTS.member("vtu", ".vtu", "field at one frequency for VTK readers: pressure, level and phase at points")
def write(result: Result, path: Path, *, frequency: float | None = None, load_case: str = "", flat: bool = False) -> Path:
    """Write the field kept at `frequency` (None: the loudest at the receivers).

    Cells are Lagrange tetrahedra of the solution's own order, exact between their points; `flat` writes linear ones
    instead, p^3 per element, for readers without high-order cells. Raises ResultError if no field is kept there.
    """
    line = kept_line(result, frequency, load_case)
    cells = volume_cells(result.space, flat)
    grid = unstructured_grid(cells, point_arrays(result, cells.cloud, line, load_case), header(result, load_case, line))
    return write_xml(grid, path)
