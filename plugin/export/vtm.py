"""VTK multi-block (.vtm): one named block per panel (two for a sheet), each with the field on its surface."""

from __future__ import annotations

from pathlib import Path

from murmesh.plugin.export import EXPORTS
from murmesh.plugin.export.arrays import header, point_arrays
from murmesh.plugin.export.vtk_cells import add_words, surface_mesh, write_xml
from murmesh.plugin.fields import kept_line
from murmesh.plugin.sampling import UNNAMED, Skin, sample_skin
from murmesh.solver.case.model import Case
from murmesh.solver.result import Result

REST = "unnamed"


@EXPORTS.member("vtm", ".vtm", "surfaces at one frequency as named blocks for VTK readers")
def write(result: Result, path: Path, *, frequency: float | None = None, load_case: str = "") -> Path:
    """Write the field kept at `frequency` (None: the loudest at the receivers) on every surface.

    The parts lie in a folder named after the file, which goes with it. Raises ResultError if no field is kept there.
    """
    from vtkmodules.vtkCommonDataModel import vtkCompositeDataSet, vtkMultiBlockDataSet

    line = kept_line(result, frequency, load_case)
    skin = sample_skin(result.space)
    arrays, words = point_arrays(result, skin.cloud, line, load_case), header(result, load_case, line)
    blocks = vtkMultiBlockDataSet()
    add_words(blocks, words)
    for number, (name, surface, sign) in enumerate(block_names(result.case, skin)):
        used, triangles = skin.part(surface, sign)
        own = {key: values[used] for key, values in arrays.items()}
        blocks.SetBlock(number, surface_mesh(skin.cloud.points[used], triangles, own, words))
        blocks.GetMetaData(number).Set(vtkCompositeDataSet.NAME(), name)
    return write_xml(blocks, path)


def block_names(case: Case, skin: Skin) -> list[tuple[str, int, int]]:
    """(name, surface index, sign) of every block: a surface, either side of a sheet, and what no surface holds."""
    blocks = []
    for index, surface in enumerate(case.surfaces):
        signs = sorted(set(skin.sign[skin.surface == index].tolist()), reverse=True)
        for sign in signs:
            side = {1: "_front", -1: "_back"}[sign] if len(signs) > 1 else ""
            blocks.append((surface.name + side, index, sign))
    if (skin.surface == UNNAMED).any():
        blocks.append((REST, UNNAMED, 1))
    return blocks
