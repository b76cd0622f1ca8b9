"""The branch `Results` of the tree: which line, receiver and load case, and which of the views are shown."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from murmesh.plugin.gmsh_views import Views
from murmesh.plugin.window.parameters import Row, Value
from murmesh.plugin.window.tree import RESULTS, Parameter, note
from murmesh.solver.result import Result

_NORMALS = {"x": (1.0, 0.0, 0.0), "y": (0.0, 1.0, 0.0), "z": (0.0, 0.0, 1.0)}
_SHOWN = {
    "levels": "Level on surfaces",
    "cut": "Level on cut plane",
    "phase": "Phase animation",
    "panels": "Panels by contribution",
}
_ON_SURFACES = {"levels", "phase", "panels"}
_LISTED = 6


@dataclass(frozen=True)
class Choice:
    """What is shown of a result."""

    frequency: float
    receiver: str
    load_case: str
    views: tuple[str, ...] = ("levels",)
    normal: str = "y"
    position: float = 0.0
    low: float = 0.0
    high: float = 0.0
    """Limits [dB] of the level views, the same for every line until a person changes them; both 0 for those of each line."""

    @classmethod
    def of(cls, result: Result, views: Views) -> Choice:
        """The loudest line at the receivers."""
        receivers = result.case.receivers
        first = receivers[0].name if receivers else ""
        middle = float(np.mean([r.position[1] for r in receivers])) if receivers else 0.0
        line = views.line()
        low, high = views.limits(line)
        return cls(line, first, result.load_cases[0].name, ("levels",), "y", round(middle, 4), low, high)


def result_parameters(result: Result, choice: Choice) -> list[Parameter]:
    """The parameters of the branch."""
    low, high = float(result.frequencies[0]), float(result.frequencies[-1])
    box = result.case.mesh.nodes
    axis = "xyz".index(choice.normal)
    receivers = tuple(receiver.name for receiver in result.case.receivers)
    load_cases = tuple(held.name for held in result.load_cases)
    rows = [
        Row(("frequency",), "Frequency", choice.frequency, "number", "line of the sweep", "Hz", low, high),
        Row(("receiver",), "Receiver", choice.receiver, "choice", "of the contributions", choices=receivers),
        Row(("load_case",), "Load case", choice.load_case, "choice", choices=load_cases),
        *(Row((which,), words, float(which in choice.views), "flag") for which, words in _SHOWN.items()),
        Row(("normal",), "Cut plane normal to", choice.normal, "choice", choices=tuple(_NORMALS)),
        Row(("position",), f"Cut plane at {choice.normal}", choice.position, "number", "", "m",
            float(box[:, axis].min()), float(box[:, axis].max())),
        Row(("low",), "Lower limit", choice.low, "number", "of level views; both limits 0: 40 dB below the highest", "dB"),
        Row(("high",), "Upper limit", choice.high, "number", "of level views", "dB"),
    ]  # fmt: skip
    return [Parameter(f"{RESULTS}/{number:02d}{row.title}", row) for number, row in enumerate(rows)]


def changed(choice: Choice, row: Row, shown: Value, views: Views) -> Choice:
    """The choice after a person changed a row of the branch."""
    key = str(row.path[0])
    if key in _SHOWN:
        # two views on the same surfaces would flicker: one takes the place of the other
        kept = {*choice.views} - (_ON_SURFACES if shown and key in _ON_SURFACES else {key}) | ({key} if shown else set())
        return replace(choice, views=tuple(which for which in _SHOWN if which in kept))
    if key == "load_case":
        # tones and densities are not of one scale: the limits begin anew
        low, high = views.limits(choice.frequency, str(shown))
        return replace(choice, load_case=str(shown), low=low, high=high)
    if key == "normal":
        result = views.result
        receivers = [receiver.position for receiver in result.case.receivers]
        points = np.array(receivers) if receivers else result.case.mesh.nodes
        position = points.mean(axis=0)["xyz".index(str(shown))]
        return replace(choice, normal=str(shown), position=round(float(position), 4))
    value: Any = float(shown) if row.form == "number" else str(shown)
    return replace(choice, **{key: value})


def show(views: Views, choice: Choice) -> Choice:
    """Draw what is chosen and remove what is not; the choice with the line really shown."""
    line = views.line(choice.frequency, choice.load_case)
    limits = (choice.low, choice.high) if choice.low < choice.high else None
    x, y, z = (choice.position if axis == choice.normal else 0.0 for axis in "xyz")
    drawn: dict[str, Callable[[], int]] = {
        "levels": lambda: views.levels(line, choice.load_case, limits),
        "cut": lambda: views.cut(line, choice.load_case, origin=(x, y, z), normal=_NORMALS[choice.normal], limits=limits),
        "phase": lambda: views.phase(line, choice.load_case),
        "panels": lambda: views.panels(line, choice.receiver, choice.load_case),
    }
    for which, draw in drawn.items():
        if which in choice.views:
            draw()
        else:
            views.remove(which)
    return replace(choice, frequency=line)


def ranking(views: Views, choice: Choice) -> list[dict[str, Any]]:
    """Read-only lines: the panels with the largest share at the receiver and line."""
    if not choice.receiver:
        return []
    shares = views.shares(choice.frequency, choice.receiver, choice.load_case)
    parent = f"{RESULTS}/50Contributions (quietening, not treating)"
    listed = list(shares.items())[:_LISTED]
    return [note(f"{parent}/{number:02d}{name}", f"{share:+.0f} %") for number, (name, share) in enumerate(listed)]
