"""What the window knows, without a window: the job as it is now and was before, and the groups of the model.

Every change returns a changed copy with the one before it kept for undo; what is on disk changes by `save` alone.
"""

from __future__ import annotations

import fnmatch
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, cast

from murmesh.plugin.check import Finding, check
from murmesh.plugin.files import written
from murmesh.plugin.job import LoadSet
from murmesh.plugin.job_text import toml_value
from murmesh.plugin.mesh_source import TaggedMesh
from murmesh.plugin.window.document import REMOVED, Document, Path_
from murmesh.plugin.window.parameters import Row, Value, kind_rows, read_back, rows, starting_tree
from murmesh.solver.case.boundary import Boundary
from murmesh.solver.case.fields import Declared
from murmesh.solver.case.load import LoadCase
from murmesh.solver.case.medium import Damping, Medium
from murmesh.solver.case.model import Receiver, Sweep
from murmesh.solver.errors import MurmeshError

NO_KIND = ""
_LOADS = (("moves", "velocity", "m/s"), ("fixes_pressure", "pressure", "Pa"), ("takes_wave", "wave", "Pa"))
_DRIVEN = ("velocity", "acceleration", "pressure", "wave")
_MONOPOLE = 1e-4
"""Volume velocity [m3/s], peak, of a monopole to begin with."""
_LOAD_HELP = {
    "velocity": "normal velocity, peak, positive = into the air: a number, a spectrum, or { csv = ..., column = ... }",
    "acceleration": "normal acceleration in m/s2, peak, positive = into the air",
    "pressure": "prescribed pressure, peak",
    "wave": "incoming plane wave, peak",
}


@dataclass(frozen=True)
class State:
    """The document, those before it, and the names of the model's surface and volume groups."""

    document: Document
    surfaces: tuple[str, ...] = ()
    volumes: tuple[str, ...] = ()
    past: tuple[Document, ...] = ()
    future: tuple[Document, ...] = ()
    saved: str = ""

    @property
    def changed(self) -> bool:
        """Whether the file on disk is older."""
        return self.document.text != self.saved

    # -- changes -------------------------------------------------------------------------------------------------------

    def changed_to(self, document: Document) -> State:
        """The state with another document; the one now is kept for undo."""
        if document == self.document:
            return self
        return replace(self, document=document, past=(*self.past, self.document), future=())

    def undone(self) -> State:
        """The state before the last change."""
        if not self.past:
            return self
        return replace(self, document=self.past[-1], past=self.past[:-1], future=(*self.future, self.document))

    def redone(self) -> State:
        """The state before the last undo; a change in between leaves nothing to redo."""
        if not self.future:
            return self
        return replace(self, document=self.future[-1], past=(*self.past, self.document), future=self.future[:-1])

    def with_row(self, row: Row, shown: Value) -> State:
        """The state after a person changed a row. Raises FieldError where the new value cannot be meant."""
        value = read_back(row, shown)
        if row.family is not None:
            return self._with_kind(row.path[:-1], row.family, str(shown))
        if row.path[0] == "surfaces":
            return self.changed_to(self._own(str(row.path[1])).with_value(row.path, value))
        return self.changed_to(self.document.with_value(row.path, value))

    def assigned(self, names: Sequence[str], kind: str) -> State:
        """The state in which the surface groups `names` are of a kind."""
        state = self
        for name in names:
            state = state._with_kind(("surfaces", name), Boundary, kind)
        return replace(state, past=(*self.past, self.document)) if state is not self else self

    def with_receiver(self, position: Sequence[float]) -> State:
        """The state with a new receiver."""
        held = self.document.value(("receivers",)) or []
        names = {entry.get("name") for entry in held}
        name = next(f"receiver_{n}" for n in range(1, len(held) + 2) if f"receiver_{n}" not in names)
        entry = {"name": name, "position": [round(float(x), 4) for x in position]}
        return self.changed_to(self.document.with_table(("receivers", len(held)), entry))

    def without_receiver(self) -> State:
        """The state without its last receiver."""
        held = self.document.value(("receivers",)) or []
        return self.changed_to(self.document.with_table(("receivers", len(held) - 1), REMOVED)) if held else self

    def with_monopole(self, position: Sequence[float]) -> State:
        """The state with a new monopole in the load case "default"."""
        held = self.document.value(("loads", "loads")) or []
        labels = {entry.get("label") for entry in held}
        label = next(f"monopole_{n}" for n in range(1, len(held) + 2) if f"monopole_{n}" not in labels)
        entry = {"kind": "monopole", "label": label, "position": [round(float(x), 4) for x in position]}
        return self._with_loads([*held, entry | {"volume_velocity": _MONOPOLE}])

    def without_monopole(self) -> State:
        """The state without the last monopole of the load case "default"."""
        held = self.document.value(("loads", "loads")) or []
        last = max((n for n, entry in enumerate(held) if entry.get("kind") == "monopole"), default=None)
        return self if last is None else self._with_loads([*held[:last], *held[last + 1 :]])

    def _with_loads(self, loads: list[Any]) -> State:
        return self.changed_to(self.document.with_value(("loads", "loads"), loads or REMOVED))

    def _with_kind(self, path: Path_, family: type[Declared], kind: str) -> State:
        if path[0] != "surfaces":
            held = self.document.value(path)
            return self.changed_to(
                self.document.with_value(path, starting_tree(family, kind, held if isinstance(held, dict) else {}))
            )
        if len(path) > 2:
            document = self._own(str(path[1]))
            held = document.value(path) or {}
            return self.changed_to(document.with_value(path, starting_tree(family, kind, held)))
        return self._surface_of_kind(str(path[1]), kind)

    def _surface_of_kind(self, name: str, kind: str) -> State:
        """Key by key, so that comments in the surface's table stay; a load the kind cannot carry goes."""
        document, old = self._own(name), self.surface_tree(name)
        wanted = starting_tree(Boundary, kind, old) | self._kept_loads(name, kind)
        for key in document.value(("surfaces", name)) or {}:
            if key not in wanted and key != "where":
                document = document.with_value(("surfaces", name, key), REMOVED)
        for key, value in wanted.items():
            if document.value(("surfaces", name, key)) != value:
                document = document.with_value(("surfaces", name, key), value)
        return self.changed_to(document)

    def _kept_loads(self, name: str, kind: str) -> dict[str, Any]:
        own = self.document.value(("surfaces", name)) or {}
        able = [key for key, _ in _carried(kind)]
        return {key: own[key] for key in _DRIVEN if key in own and key in able}

    def _own(self, name: str) -> Document:
        """The document in which a surface has a table of its own, a copy of what its glob says."""
        if self.document.value(("surfaces", name)) is not None:
            return self.document
        tree = {key: value for key, value in self.surface_tree(name).items() if key not in (*_DRIVEN, "where")}
        return self.document.with_table(("surfaces", name), tree or {"kind": "rigid"})

    # -- what is so ----------------------------------------------------------------------------------------------------

    def surface_tree(self, name: str) -> Mapping[str, Any]:
        """The table that describes a surface group: its own, else that of a glob; empty where there is none."""
        return _described(self.document.value(("surfaces",)), name)

    def kind_of(self, name: str) -> str:
        """The boundary kind of a surface group; NO_KIND where the job says none."""
        return str(self.surface_tree(name).get("kind", NO_KIND))

    def kinds(self) -> dict[str, str]:
        """The boundary kind of every surface group."""
        return {name: self.kind_of(name) for name in self.surfaces}

    def findings(self, mesh: TaggedMesh) -> tuple[Finding, ...]:
        """What the tag check says. Raises CaseError for a job that cannot be read."""
        return check(self.document.job, mesh)

    def problem(self) -> str:
        """Why the job cannot be read as it stands; nothing where it can."""
        try:
            _ = self.document.job
        except MurmeshError as error:
            return str(error)
        return ""

    # -- rows ----------------------------------------------------------------------------------------------------------

    def surface_rows(self, name: str) -> Iterator[Row]:
        """Kind, fields and load of a surface group."""
        tree, path = self.surface_tree(name), ("surfaces", name)
        yield from kind_rows(Boundary, tree, path, "boundary", "what the surface does to the fluid")
        own = self.document.value(path) or {}
        for key, unit in _carried(self.kind_of(name)):
            shown = toml_value(own[key]) if key in own else ""
            yield Row((*path, key), key, shown, "toml", _LOAD_HELP[key], unit, required=False)

    def volume_rows(self, name: str) -> Iterator[Row]:
        """Medium and damping of a volume group."""
        held = self.document.value(("regions",)) or {}
        at = name if name in held else _glob(held, name) or name
        tree = held.get(at, {})
        yield from kind_rows(Medium, tree.get("medium", {}), ("regions", at, "medium"), "medium", "what fills the volume")
        damping = tree.get("damping", {"kind": "none"})
        yield from kind_rows(Damping, damping, ("regions", at, "damping"), "damping", "its losses, as they were measured")

    def load_rows(self) -> Iterator[tuple[str, Row]]:
        """(load case, row) of the load case "default" and the operating states."""
        for row in rows(LoadSet, self.document.value(("loads",)) or {}, ("loads",)):
            yield "default", row
        for index, tree in enumerate(self.document.value(("load_cases",)) or []):
            for row in rows(LoadCase, tree, ("load_cases", index), () if "loads" in tree else ("loads",)):
                yield str(tree.get("name", index)), row
            if "panels" in tree:
                path: Path_ = ("load_cases", index, "panels")
                help_ = "a surface velocity per column of a file"
                yield str(tree.get("name", index)), Row(path, "panels", toml_value(tree["panels"]), "toml", help_)

    def receiver_rows(self) -> Iterator[tuple[str, Row]]:
        """(receiver, row) of every receiver."""
        for index, tree in enumerate(self.document.value(("receivers",)) or []):
            for row in rows(Receiver, tree, ("receivers", index)):
                yield str(tree.get("name", index)), row

    def sweep_rows(self) -> Iterator[Row]:
        """The lines as they are written (a grid or a list), then order, accuracy, method ..."""
        tree = self.document.value(("sweep",)) or {}
        listed = "frequencies" in tree
        if not listed:
            for key, help_ in (("start", "first line"), ("stop", "last line"), ("step", "from line to line")):
                yield Row(("sweep", key), key, float(tree.get(key, 0.0)), "number", help_, "Hz", low=0.0)
            extra = toml_value(tree["extra"]) if "extra" in tree else ""
            yield Row(("sweep", "extra"), "extra", extra, "toml", "further lines", "Hz", required=False)
        yield from rows(Sweep, tree, ("sweep",), () if listed else ("frequencies",))


def _carried(kind: str) -> list[tuple[str, str]]:
    """(key, unit) of the loads that a surface of this kind may carry."""
    if kind not in Boundary.registry:
        return []
    member: Any = Boundary.registry[kind]
    able = [(key, unit) for capability, key, unit in _LOADS if getattr(member, capability)]
    return [*able, ("acceleration", "m/s2")] if member.moves else able


def _described(held: Any, name: str) -> Mapping[str, Any]:
    entries = held if isinstance(held, Mapping) else {}
    at = name if name in entries else _glob(entries, name)
    return cast(Mapping[str, Any], entries[at]) if at else {}


def _glob(held: Mapping[str, Any], name: str) -> str:
    return next((pattern for pattern in held if fnmatch.fnmatchcase(name, pattern)), "")


def save(state: State, path: Path) -> State:
    """Write the job file; returns the state that is on disk. Raises CaseError, and writes nothing, for a job that is none."""
    _ = state.document.job
    with written(path) as scratch:
        scratch.write_text(state.document.text, encoding="utf-8")
    unsaved_file(path).unlink(missing_ok=True)
    return replace(state, saved=state.document.text)


def unsaved_file(path: Path) -> Path:
    """Where the changes to the job file `path` that were not saved yet are kept, so that nothing is lost with the window."""
    return path.with_name(f"{path.stem}.unsaved{path.suffix}")


def keep(state: State, path: Path) -> None:
    """Write what a person changed and did not save beside the job file; remove it where nothing is left of it."""
    beside = unsaved_file(path)
    if not (state.changed and (state.past or state.future)):
        beside.unlink(missing_ok=True)
        return
    with written(beside) as scratch:
        scratch.write_text(state.document.text, encoding="utf-8")


def taken_up(state: State, path: Path) -> State:
    """The state with the changes that were not saved when a window closed, as one change: undo goes back to the file."""
    beside = unsaved_file(path)
    if not beside.is_file():
        return state
    return state.changed_to(replace(state.document, text=beside.read_text(encoding="utf-8")))


__all__ = ["NO_KIND", "State", "keep", "save", "taken_up", "unsaved_file"]
