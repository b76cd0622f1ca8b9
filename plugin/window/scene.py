"""What gmsh draws for murmesh: surfaces in the colour of their kind, the legend, and nothing in front of a view."""

from __future__ import annotations

import tempfile
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from murmesh.plugin.gmsh_session import current_gmsh
from murmesh.plugin.window.palette import channels, draw_legend

_OPTIONS: dict[str, float] = {
    "General.MenuWidth": 460,
    "General.GraphicsWidth": 1300,
    "General.GraphicsHeight": 820,
    "General.MouseHoverMeshes": 1,
    "General.BackgroundGradient": 0,
    "Geometry.Points": 0,
    "Mesh.ColorCarousel": 1,
    "Mesh.VolumeEdges": 0,
    "Mesh.SurfaceEdges": 1,
    "Mesh.SurfaceFaces": 1,
    "Mesh.Light": 0,  # a shaded colour is not the one of the legend
    "General.ScaleX": 0.85,
    "General.ScaleY": 0.85,
    "General.ScaleZ": 0.85,
    "General.RotationX": 290,
    "General.RotationY": 0,
    "General.RotationZ": 215,
    "General.Trackball": 0,
}
_MARGIN = 12  # pixels


class Scene:
    """The drawing of the current model."""

    def __init__(self, entities: Mapping[str, Sequence[int]]) -> None:
        self._entities = entities
        self._folder = tempfile.TemporaryDirectory(prefix="murmesh-")
        self._legend = -1
        self._drawn: dict[str, str] = {}
        self._count = 0
        for option, value in _OPTIONS.items():
            current_gmsh().option.setNumber(option, value)

    def colour(self, kinds: Mapping[str, str]) -> None:
        """Colour the surfaces by their kinds and bring the legend up to date."""
        if kinds == self._drawn:
            return
        gmsh = current_gmsh()
        for name, kind in kinds.items():
            gmsh.model.setColor([(2, tag) for tag in self._entities.get(name, ())], *channels(kind))
        self._draw_legend(gmsh, kinds)
        self._drawn = dict(kinds)

    def _draw_legend(self, gmsh: Any, kinds: Mapping[str, str]) -> None:
        # gmsh keeps a picture by its name: another legend needs another
        self._count += 1
        path = Path(self._folder.name) / f"legend{self._count}.png"
        width, height = draw_legend(kinds.values(), path)
        if self._legend in gmsh.view.getTags():
            gmsh.view.remove(self._legend)
        self._legend = gmsh.view.add("Boundary kinds (legend)", self._legend)
        place = [_MARGIN, _MARGIN + height]
        gmsh.view.addListDataString(self._legend, place, [f"file://{path}@{width}x{height}"], ["Align", "Left"])

    def show_surfaces(self, shown: bool) -> None:
        """Faces of the mesh; away while a view lies on them, where both would flicker."""
        gmsh = current_gmsh()
        for option in ("Mesh.SurfaceFaces", "Mesh.SurfaceEdges"):
            gmsh.option.setNumber(option, float(shown))

    def close(self) -> None:
        """Remove the files of the legend."""
        self._folder.cleanup()
