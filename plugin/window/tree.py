"""Rows as parameters of gmsh's tree and back. gmsh sorts by name and hides leading digits, so names are numbered."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

from murmesh.plugin.window.parameters import Row, Value
from murmesh.plugin.window.state import State

ROOT = "murmesh"
SURFACES, VOLUMES, LOADS, RECEIVERS, SWEEP, RESULTS = (
    f"{ROOT}/{n}{name}" for n, name in enumerate(("Surfaces", "Volumes", "Loads", "Receivers", "Sweep", "Results"), 1)
)
NONE = "(none)"


@dataclass(frozen=True)
class Parameter:
    """A row at its place in the tree."""

    name: str
    row: Row

    @property
    def json(self) -> dict[str, Any]:
        """As gmsh's parameter database takes it the first time: its branch is closed."""
        held = self.again
        closed = "0" if self.name.startswith(RESULTS) else "1"
        return held | {"attributes": held["attributes"] | {"Closed": closed}}

    @property
    def again(self) -> dict[str, Any]:
        """The same for a parameter that is there already: its branch stays as a person left it."""
        row = self.row
        held: dict[str, Any] = {"name": self.name, "attributes": {"Help": row.help, "Closed": "0"}}
        if row.form == "choice":
            labels = _labels(row)
            return held | {
                "type": "number",
                "values": [labels.get(str(row.value), -1)],
                "choices": list(labels.values()),
                "valueLabels": labels,
            }
        if row.form == "flag":
            return held | {"type": "number", "values": [float(row.value)], "choices": [0, 1]}
        if row.form in ("number", "whole") and not isinstance(row.value, str):
            limits = {key: value for key, value in (("min", row.low), ("max", row.high)) if math.isfinite(value)}
            return held | {"type": "number", "values": [float(row.value)]} | limits | {"step": 1 if row.form == "whole" else 0}
        return held | {"type": "string", "values": [str(row.value)]}

    def read(self, value: Any) -> Value:
        """What a person means by the value in the database."""
        if self.row.form == "choice":
            return next((text for text, number in _labels(self.row).items() if number == int(value)), "")
        return value if isinstance(value, str) else float(value)

    @property
    def stored(self) -> Any:
        """The value as it lies in the database."""
        return self.again["values"][0]


def _labels(row: Row) -> dict[str, int]:
    labels = {choice: number for number, choice in enumerate(row.choices)}
    return labels if str(row.value) in labels else {NONE: -1} | labels


def title(row: Row) -> str:
    """The label, behind the names of the fields it lies in: a surface's `wall` has a `wall value`."""
    inner = [str(step) for step in row.path[2:-1] if not isinstance(step, int)]
    inner = inner[:-1] if row.label in inner[-1:] else inner
    return safe(" ".join([*inner, row.title]).replace("_", " "))


def safe(text: str) -> str:
    """Words as a part of a name in gmsh's tree, where a slash opens a branch."""
    return text.replace("/", "\N{DIVISION SLASH}")


def branch(parent: str, number: int, name: str) -> str:
    """The path of a branch, so named that gmsh sorts it by number (00 to 99 are left to buttons) and shows its name."""
    return f"{parent}/{100 + number}{' ' if name[:1].isdigit() else ''}{safe(name)}"


def parameters(state: State) -> list[Parameter]:
    """Every parameter of the job, in order."""
    found: list[Parameter] = []
    for number, name in enumerate(state.surfaces):
        found += _placed(branch(SURFACES, number, name), state.surface_rows(name))
    for number, name in enumerate(state.volumes):
        found += _placed(branch(VOLUMES, number, name), state.volume_rows(name))
    for parent, pairs in ((LOADS, state.load_rows()), (RECEIVERS, state.receiver_rows())):
        grouped: dict[tuple[Any, ...], tuple[str, list[Row]]] = {}
        for name, row in pairs:
            grouped.setdefault(row.path[: 1 + isinstance(row.path[1], int)], (name, []))[1].append(row)
        for number, (name, rows) in enumerate(grouped.values()):
            found += _placed(branch(parent, number, name), rows)
    return [*found, *_placed(SWEEP, state.sweep_rows())]


def _placed(parent: str, rows: Iterable[Row]) -> list[Parameter]:
    return [Parameter(f"{parent}/{number:02d}{title(row)}", row) for number, row in enumerate(rows)]


def button(name: str, action: str, help: str = "") -> dict[str, Any]:
    """A button that asks for an action."""
    return {
        "type": "string",
        "name": name,
        "values": [action],
        "attributes": {"Macro": "Action", "Aspect": "Button", "Help": help},
    }


def note(name: str, text: str) -> dict[str, Any]:
    """A line that is read only."""
    return {"type": "string", "name": name, "values": [text], "readOnly": True}


def edits(shown: Mapping[str, Parameter], now: Mapping[str, Any]) -> list[tuple[Parameter, Value]]:
    """What a person changed: parameters whose value in the database is no longer the one that was put there."""
    changed = [(parameter, now[name]) for name, parameter in shown.items() if name in now]
    return [(parameter, parameter.read(value)) for parameter, value in changed if value != parameter.stored]
