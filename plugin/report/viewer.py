"""The model to turn in the page: its surfaces as flat triangles with a level each, drawn by `viewer.js` on a canvas.

Everything it needs stands in the page as text: positions as float32, numbers as int32, levels as int16 in hundredths of a
decibel, all little-endian in base64. It needs no network, no library and no graphics card.
"""

from __future__ import annotations

import base64
from collections.abc import Sequence
from dataclasses import dataclass
from importlib.resources import files

import matplotlib
import numpy as np
import numpy.typing as npt

from murmesh.plugin.describe import hertz, is_density, level_unit
from murmesh.plugin.fields import field_levels
from murmesh.plugin.pictures.scene import FIRST_CORNER, Outline, triangle_normals
from murmesh.plugin.pictures.style import LEVEL_MAP, level_limits
from murmesh.plugin.report.html import Html, data, join, note, tag
from murmesh.plugin.sampling import Skin, sample_skin, values_on
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
_MOST_TRIANGLES = 9000  # a browser draws them on a canvas in some 20 ms
_UNNAMED = "no surface"


@dataclass(frozen=True, eq=False)
class View:
    """The skin and the levels (lines, triangles) [dB] on it, one scale for all lines."""

    result: Result
    load_case: str
    lines: tuple[float, ...]
    skin: Skin
    levels: Floats
    limits: tuple[float, float]

    @classmethod
    def of(cls, result: Result, lines: Sequence[float], load_case: str = "") -> View:
        """Levels at `lines`: the mean square of each triangle's corners."""
        faces = len(result.space.topology.boundary_sides()[0])
        skin = sample_skin(result.space, max(1, min(8, int(np.sqrt(_MOST_TRIANGLES / max(faces, 1))))))
        levels = [_levels(result, skin, line, load_case) for line in lines]
        return cls(result, load_case, tuple(lines), skin, np.array(levels), level_limits(np.concatenate(levels)))


def _levels(result: Result, skin: Skin, line: float, load_case: str) -> Floats:
    pressure = np.asarray(values_on(result.space, skin.cloud, result.field(line, load_case)), dtype=np.complex128)
    at_points = 10 ** (field_levels(result, pressure, load_case) / 10)
    return np.asarray(10 * np.log10(at_points[skin.triangles].mean(axis=1)))


def model_view(view: View) -> Html:
    """The canvas, its data and its script."""
    first = (tag("label", _radio(i), f" {hertz(line)}") for i, line in enumerate(view.lines))
    unit = f"level [{level_unit('Z', is_density(view.result, view.load_case))}]"
    canvas = tag("canvas", "The model to turn needs a browser that draws.", id="model", width=1400, height=760, tabindex=0,
                 role="img", aria_label=f"The model's surfaces, coloured by {unit}; arrow keys turn it")  # fmt: skip
    return join(
        [
            tag("fieldset", tag("legend", "The model to turn, at"), *first, class_="screen"),
            tag("figure", canvas, tag("figcaption", tag("span", id="reading"), _HINT)),
            note("Seen from inside: walls that turn their back are left out, as on the maps; thin lines are their outlines."),
            data("model-data", tree(view, unit)),
            tag("script", Html((files("murmesh.plugin.report") / "viewer.js").read_text(encoding="utf-8"))),
        ]
    )


_HINT = tag(
    "span", "Drag or use the arrow keys to turn, wheel or + and − to zoom, point at a wall to read it.", class_="screen"
)


def _radio(index: int) -> Html:
    return tag("input", type="radio", name="line", value=index, checked="checked" if index == 0 else None)


def tree(view: View, unit: str) -> dict[str, object]:
    """What the script reads."""
    skin, case = view.skin, view.result.case
    x = skin.cloud.points
    middle = (x.min(axis=0) + x.max(axis=0)) / 2
    colours = np.round(255 * matplotlib.colormaps[LEVEL_MAP](np.linspace(0, 1, 256))[:, :3]).astype(np.uint8)
    return {
        "points": _packed(x - middle, "<f4"),
        "triangles": _packed(skin.triangles, "<i4"),
        "normals": _packed(triangle_normals(skin), "<f4"),
        "surface": _packed(skin.surface, "<i4"),
        "edges": _packed(Outline.of(skin).edges, "<i4"),
        "levels": [_packed(np.clip(np.round(100 * row), -32768, 32767), "<i2") for row in view.levels],
        "lines": [hertz(line) for line in view.lines],
        "names": [surface.name for surface in case.surfaces],
        "unnamed": _UNNAMED,
        "receivers": [{"name": r.name, "at": (np.array(r.position) - middle).round(6).tolist()} for r in case.receivers],
        "limits": list(view.limits),
        "unit": unit,
        "colours": _packed(colours, "u1"),
        "from": FIRST_CORNER.tolist(),
        "radius": float(np.linalg.norm(x - middle, axis=1).max()),
    }


def _packed(values: npt.NDArray[np.generic], kind: str) -> str:
    return base64.b64encode(np.ascontiguousarray(values, dtype=kind).tobytes()).decode()
