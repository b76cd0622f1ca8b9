"""VTK multi-block (.vtm) of the outside: the surfaces that radiate, a box of air around them, and the far field on a ball."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from murmesh.plugin.describe import plain
from murmesh.plugin.directivity import Pattern, pattern
from murmesh.plugin.export import EXPORTS
from murmesh.plugin.export.arrays import header, named_arrays, point_arrays
from murmesh.plugin.export.vtk_cells import add_words, surface_mesh, uniform_grid, write_xml
from murmesh.plugin.fields import kept_line
from murmesh.plugin.sampling import sample_skin
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
POINTS, REACH = 24, 2.0
"""Points along the longest side of the box of air, and its size in sizes of the surface that radiates."""


@EXPORTS.member("outside_vtm", ".vtm", "field beyond the surfaces that radiate, and the far field", source="outside")
def write(result: Result, path: Path, *, frequency: float | None = None, load_case: str = "") -> Path:
    """Write blocks `surface/NAME`, `air/NAME` and `far/NAME` for every surface that radiates.

    air: pressures on a lattice, nan inside bodies and below a ground plane. far: the balloon, radius 1 m at the loudest and
    0 at 40 dB below it, with the directivity index and the level at 1 m that the far field would have there.
    """
    from vtkmodules.vtkCommonDataModel import vtkCompositeDataSet, vtkMultiBlockDataSet

    line = kept_line(result, frequency, load_case)
    words = header(result, load_case, line)
    skin = sample_skin(result.space)
    names = [surface.name for surface in result.case.surfaces]
    blocks: dict[str, Any] = {}
    for far in pattern(result, line, load_case):
        used, triangles = skin.part(names.index(far.name))
        arrays = {name: values[used] for name, values in point_arrays(result, skin.cloud, line, load_case).items()}
        points = skin.cloud.points[used]
        blocks[f"surface/{far.name}"] = surface_mesh(points, triangles, arrays, words)
        blocks[f"air/{far.name}"] = _air(result, points, line, load_case, words)
        blocks[f"far/{far.name}"] = _balloon(far, words)
    made = vtkMultiBlockDataSet()
    add_words(made, words)
    for number, (name, block) in enumerate(blocks.items()):
        made.SetBlock(number, block)
        made.GetMetaData(number).Set(vtkCompositeDataSet.NAME(), name)
    return write_xml(made, path)


def _air(result: Result, surface: Floats, line: float, load_case: str, words: dict[str, str]) -> Any:
    low, high = surface.min(axis=0), surface.max(axis=0)
    middle, half = 0.5 * (low + high), 0.5 * REACH * (high - low)
    step = 2 * float(half.max()) / (POINTS - 1)
    counts = np.maximum(np.ceil(2 * half / step).astype(int) + 1, 2)
    origin = middle - 0.5 * step * (counts - 1)
    axes = [origin[i] + step * np.arange(counts[i]) for i in range(3)]
    points = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).transpose(2, 1, 0, 3).reshape(-1, 3)  # x runs fastest
    pressure = result.pressure_at(points, line, load_case)
    return uniform_grid(origin, step, counts, named_arrays(result, pressure, load_case), words)


def _balloon(far: Pattern, words: dict[str, str]) -> Any:
    arrays = {"directivity_index_db": far.index, "level_db": far.level}
    own = words | {"units": plain("directivity_index_db: dB; level_db: of the far field at 1 m, dB re 20 uPa")}
    return surface_mesh(far.centre + far.radius[:, None] * far.directions, far.triangles, arrays, own)
