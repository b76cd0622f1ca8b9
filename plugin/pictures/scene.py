"""Views into the model: where to look from, what is drawn there, and where a point lands on the page.

A wall is drawn only from its fluid side: of two views from opposite corners the first shows every wall that faces the one
corner and the second all others, so together they show the whole inside once. The projection is parallel, its axes are in
metres, and words are put on the page afterwards, where they can be read.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes

from murmesh.plugin.pictures.style import DPI, INK, QUIET, Page
from murmesh.plugin.probe import require_rendering
from murmesh.plugin.sampling import Skin

if TYPE_CHECKING:
    from pyvista import PolyData

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Image = npt.NDArray[np.uint8]

FIRST_CORNER = np.array([-0.52, -0.70, 0.49])  # the first corner: behind, to the right, above; the second lies opposite
_SHARP = np.cos(np.radians(30.0))  # an edge is drawn where neighbours differ by more
_FIT = 1.06
_CAPTION = 0.32  # inches above a view
VIEWS_NOTE = (
    "Two views from opposite corners, parallel projection; walls that turn their back are left out (thin outlines), so that "
    "each wall is seen from the fluid’s side in one of the two."
)


@dataclass(frozen=True, eq=False)
class View:
    """A parallel projection: `towards` (3,) points at the viewer; right and up (3,) span the page; sizes in metres."""

    towards: Floats
    right: Floats
    up: Floats
    centre: Floats
    half_width: float
    half_height: float

    @classmethod
    def along(cls, towards: Floats, points: Floats, aspect: float) -> View:
        """The view from `towards` that holds all points in a frame of width/height `aspect`."""
        towards = towards / np.linalg.norm(towards)
        right = np.cross([0.0, 0.0, 1.0], towards)
        right = right / np.linalg.norm(right)
        up = np.cross(towards, right)
        flat = points @ np.stack([right, up], axis=1)
        low, high = flat.min(axis=0), flat.max(axis=0)
        height = max(high[1] - low[1], (high[0] - low[0]) / aspect) * _FIT
        middle, depth = (low + high) / 2, points @ towards
        centre = middle[0] * right + middle[1] * up + (depth.min() + depth.max()) / 2 * towards
        return cls(towards, right, up, centre, 0.5 * height * aspect, 0.5 * height)

    def project(self, points: Floats) -> Floats:
        """Points (k, 3) on the page (k, 2) [m], the centre of the view at the origin."""
        return np.asarray((points - self.centre) @ np.stack([self.right, self.up], axis=1))

    @property
    def extent(self) -> tuple[float, float, float, float]:
        """left, right, bottom, top of the page [m], as an image wants them."""
        return -self.half_width, self.half_width, -self.half_height, self.half_height


def corner_views(points: Floats, aspect: float) -> tuple[View, View]:
    """The two views from opposite corners, at the same scale."""
    return View.along(FIRST_CORNER, points, aspect), View.along(-FIRST_CORNER, points, aspect)


@dataclass(frozen=True, eq=False)
class Outline:
    """Edges (k, 2) into the skin's points where panels meet or bend, and the unit normals (k, 2, 3) on either side."""

    edges: Ints
    normals: Floats

    @classmethod
    def of(cls, skin: Skin) -> Outline:
        normals = triangle_normals(skin)
        label = 2 * skin.surface + (skin.sign < 0)
        pairs = np.sort(skin.triangles[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2), axis=1)
        owner = np.repeat(np.arange(len(skin.triangles)), 3)
        order = np.lexsort(pairs.T[::-1])
        pairs, owner = pairs[order], owner[order]
        same = np.flatnonzero(np.all(pairs[1:] == pairs[:-1], axis=1))
        a, b = owner[same], owner[same + 1]
        bends = np.einsum("kd,kd->k", normals[a], normals[b]) < _SHARP
        chosen = bends | (label[a] != label[b])
        return cls(pairs[same[chosen]], np.stack([normals[a[chosen]], normals[b[chosen]]], axis=1))

    def split(self, view: View) -> tuple[Ints, Ints]:
        """(edges of walls that are drawn, edges that belong to left-out walls only)."""
        shown = np.any(self.normals @ view.towards < 0, axis=1)
        return self.edges[shown], self.edges[~shown]


def triangle_normals(skin: Skin) -> Floats:
    """Unit normals (m, 3) out of the fluid."""
    x = skin.cloud.points[skin.triangles]
    normal = np.cross(x[:, 1] - x[:, 0], x[:, 2] - x[:, 0])
    return np.asarray(normal / np.maximum(np.linalg.norm(normal, axis=1), 1e-300)[:, None])


def render(
    view: View, skin: Skin, outline: Outline, pixels: tuple[int, int], *, smooth: bool = True, **colouring: Any
) -> Image:
    """The walls that show their fluid side, as an image (height, width, 3).

    `colouring` goes to the renderer: scalars with clim and cmap, or rgb. Without `smooth` colours are exact and no edge
    is drawn. Raises MissingLibraryError where nothing can be drawn.
    """
    require_rendering()
    import pyvista

    # Any: some of its methods are typed as if they took the plotter twice
    plotter: Any = pyvista.Plotter(off_screen=True, window_size=list(pixels), lighting="none")
    try:
        plotter.set_background("white")
        mesh = _polydata(skin)
        plotter.add_mesh(mesh, lighting=False, culling="front", show_scalar_bar=False, **colouring)
        plotter.disable_anti_aliasing()
        if smooth:
            plotter.enable_anti_aliasing("ssaa")
            shown, left_out = outline.split(view)
            for edges, colour, width in ((shown, INK, 1.6), (left_out, QUIET, 1.0)):
                if len(edges):
                    plotter.add_mesh(_lines(view, skin, edges), color=colour, line_width=width, lighting=False)
        _look(plotter, view)
        return np.asarray(plotter.screenshot(return_img=True))
    finally:
        plotter.close()


def _polydata(skin: Skin) -> PolyData:
    import pyvista

    faces = np.hstack([np.full((len(skin.triangles), 1), 3), skin.triangles])
    return pyvista.PolyData(skin.cloud.points, faces.ravel())


def _lines(view: View, skin: Skin, edges: Ints) -> PolyData:
    """Edges, a little in front of the faces they lie on."""
    import pyvista

    lines = np.hstack([np.full((len(edges), 1), 2), edges])
    lift = 2e-3 * (view.half_width + view.half_height) * view.towards
    return pyvista.PolyData(skin.cloud.points + lift, lines=lines.ravel())


def _look(plotter: Any, view: View) -> None:
    away = 10 * (view.half_width + view.half_height)
    plotter.camera.position = (view.centre + away * view.towards).tolist()
    plotter.camera.focal_point = view.centre.tolist()
    plotter.camera.up = view.up.tolist()
    plotter.camera.parallel_projection = True
    plotter.camera.parallel_scale = view.half_height
    plotter.renderer.ResetCameraClippingRange()


def panel_pixels(view: View, skin: Skin, outline: Outline, pixels: tuple[int, int]) -> Ints:
    """Surface index seen at every pixel (height, width); -2 for the background, -1 for walls without a surface."""
    code = skin.surface + 2
    colours = np.stack([code % 256, code // 256, np.full(len(code), 64)], axis=1).astype(np.uint8)
    seen = render(view, skin, outline, pixels, smooth=False, scalars=colours, rgb=True).astype(np.int64)
    found = seen[..., 0] + 256 * seen[..., 1] - 2
    return np.where(seen[..., 2] == 64, found, -2)


def two_views(sheet: Page, skin: Skin, aside: float, below: float, **colouring: Any) -> list[tuple[Axes, View]]:
    """Both corner views side by side on a page, `aside` inches free at either side of each and `below` under it."""
    width = sheet.width / 2 - 2 * aside
    height = sheet.height - below - _CAPTION
    pixels = round(width * DPI), round(height * DPI)
    outline, out = Outline.of(skin), []
    for i, view in enumerate(corner_views(skin.cloud.points, width / height)):
        axes = sheet.axes(i * sheet.width / 2 + aside, below, width, height)
        axes.imshow(render(view, skin, outline, pixels, **colouring), extent=view.extent, interpolation="none")
        axes.set_axis_off()
        axes.set_title(f"seen from {_corner(view)}", fontsize=10, color=QUIET, pad=4)
        out.append((axes, view))
    return out


def _corner(view: View) -> str:
    return " ".join(("+" if part > 0 else "−") + name for name, part in zip("xyz", view.towards, strict=True))
