"""murmesh in gmsh's own window: gmsh draws and asks, `State` knows, a child process solves.

gmsh reports what a person did through one parameter, `ONELAB/Action`: "check" after an edit in the tree, else the name of
the button. Nothing here may raise into the loop: a deliberate error becomes a line in gmsh's message log.
"""

from __future__ import annotations

import json
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

from murmesh.plugin.check import Finding, render
from murmesh.plugin.cli.command import say
from murmesh.plugin.files import written
from murmesh.plugin.gmsh_session import current_gmsh
from murmesh.plugin.gmsh_views import Views
from murmesh.plugin.mesh_source import job_stored_in
from murmesh.plugin.model import build_case, store_job
from murmesh.plugin.window import results
from murmesh.plugin.window.child import Child
from murmesh.plugin.window.opening import Opened
from murmesh.plugin.window.scene import Scene
from murmesh.plugin.window.state import State, keep, save, taken_up, unsaved_file
from murmesh.plugin.window.tree import LOADS, RECEIVERS, RESULTS, ROOT, SURFACES, Parameter, button, edits, note, parameters
from murmesh.solver.case.boundary import Boundary
from murmesh.solver.case.hdf5 import write_case
from murmesh.solver.errors import MurmeshError
from murmesh.solver.result import Result, read_result

_TICK = 0.1  # seconds between two looks at the child and at gmsh's actions
_JOB = f"{ROOT}/0Job"
_FINDINGS = f"{ROOT}/8Check"
_KIND = f"{SURFACES}/00Kind to assign"
_MAIN_BUTTON = {False: ["Solve", "solve"], True: ["Stop", "stop"]}
_PICKED, _KEY_E, _KEY_U = 1, 4, 3  # what gmsh's selection returns; 0 is key q


class Window:
    """The window and what is open in it."""

    def __init__(self, opened: Opened, state: State) -> None:
        self.opened, self.state = opened, state
        self.scene = Scene(opened.entities)
        self.views: Views | None = None
        self.choice: results.Choice | None = None
        self.child: Child | None = None
        self.findings: tuple[Finding, ...] = ()
        self._kind = "vibrating"
        self._shown: dict[str, Parameter] = {}
        self._names: set[str] = set()
        self._actions: dict[str, Callable[[], None]] = {
            "check": self._edited,
            "reset": self._refresh,
            "run": self.solve,
            "solve": self.solve,
            "stop": self.stop,
            "save": self.save,
            "undo": self.undo,
            "redo": lambda: self._become(self.state.redone(), "the change undone last is made again"),
            "check_tags": self.check_tags,
            "pick": self.pick,
            "add_receiver": lambda: self._become(self.state.with_receiver(self._middle())),
            "remove_receiver": lambda: self._become(self.state.without_receiver()),
            "add_monopole": lambda: self._become(self.state.with_monopole(self._middle())),
            "remove_monopole": lambda: self._become(self.state.without_monopole()),
        }

    # -- the loop ------------------------------------------------------------------------------------------------------

    def run(self) -> None:
        """Show the window until it is closed."""
        gmsh = current_gmsh()
        gmsh.fltk.initialize()
        self._refresh()
        for name in (ROOT, _JOB, SURFACES):
            gmsh.fltk.openTreeItem(name)
        self._say(f"murmesh: {self.opened.model.name}, job {self.opened.job_file}")
        self.load_result()
        self._take_up()
        try:
            while gmsh.fltk.isAvailable():
                self.tick()
                gmsh.fltk.wait(_TICK)
        finally:
            self.close()

    def tick(self) -> None:
        """One look at what a person asked for and at how far the solution is."""
        gmsh = current_gmsh()
        [action, *_] = gmsh.onelab.getString("ONELAB/Action") or [""]
        if action:
            gmsh.onelab.setString("ONELAB/Action", [""])
            self.act(action)
        self._poll()

    def act(self, action: str) -> None:
        """Do what a button or an edit asks for; deliberate errors are said, and the tree shows what is so."""
        try:
            self._actions.get(action, self._refresh)()
        except (MurmeshError, OSError) as error:
            self._say(f"murmesh: {error}", "error")
            self._refresh()

    def close(self) -> None:
        """Stop the solution, remove scratch files, say where changes are that were not saved."""
        if self.child is not None:
            self.child.close()
        self.scene.close()
        beside = unsaved_file(self.opened.job_file)
        if beside.is_file():
            say(f"murmesh: changes that were not saved are kept in {beside}; the window takes them up when it opens again")

    def _take_up(self) -> None:
        """Go on with what was not saved when the window closed."""
        try:
            state = taken_up(self.state, self.opened.job_file)
            _ = state.document.tree
        except (MurmeshError, OSError, UnicodeDecodeError) as error:
            self._say(f"murmesh: {unsaved_file(self.opened.job_file)} cannot be read: {error}", "warning")
            return
        if state is not self.state:
            self._become(state, "changes that were not saved last time are here again; Undo returns to the job file")

    # -- the job -------------------------------------------------------------------------------------------------------

    def save(self) -> None:
        """Write the job file, and the job into the model and its .msh."""
        self.state = save(self.state, self.opened.job_file)
        model = self.opened.model
        store_job(self.state.document.job)
        if self.opened.regrouped:
            current_gmsh().write(str(model.with_suffix(".msh")))
        elif model.suffix.lower() == ".msh":
            with written(model) as scratch:
                scratch.write_bytes(job_stored_in(model.read_bytes(), self.state.document.job.to_json()))
        self._say(f"murmesh: saved {self.opened.job_file}")
        self._refresh()

    def undo(self) -> None:
        """Take back the last change."""
        self._become(self.state.undone(), "last change undone")

    def check_tags(self) -> None:
        """List what the tag check finds."""
        self.findings = self.state.findings(self.opened.mesh)
        for line in render(self.findings).splitlines():
            self._log(line, "info")
        self._say(f"murmesh: {render(self.findings).splitlines()[-1] if self.findings else 'nothing found'}")
        self._refresh()
        current_gmsh().fltk.openTreeItem(_FINDINGS)

    def pick(self) -> None:
        """Give the kind chosen in the tree to surfaces as they are picked, until e or q is pressed."""
        gmsh, group_of = current_gmsh(), self.opened.group_of
        self.scene.show_surfaces(True)
        while gmsh.fltk.isAvailable():
            gmsh.fltk.setStatusMessage(f"Pick surfaces: {self._kind} (u: undo, e or q: end)", True)
            found, entities = gmsh.fltk.selectEntities(2)
            if found == _KEY_U:
                self.undo()
                continue
            if found != _PICKED:
                break
            names = list(dict.fromkeys(group_of[tag] for _, tag in entities if tag in group_of))
            self._become(self.state.assigned(names, self._kind), f"{', '.join(names) or 'no group here'}: {self._kind}")
        gmsh.fltk.setStatusMessage("", True)
        self.scene.show_surfaces(self.choice is None or not self.choice.views)
        self._refresh()

    def _edited(self) -> None:
        now = self._database()
        if _KIND in now:
            self._kind = list(Boundary.registry)[int(now[_KIND])]
        state, choice = self.state, self.choice
        for parameter, value in edits(self._shown, now):
            if parameter.name.startswith(RESULTS) and choice is not None and self.views is not None:
                choice = results.changed(choice, parameter.row, value, self.views)
            else:
                state = state.with_row(parameter.row, value)
        if choice is not self.choice and choice is not None:
            self._show(choice)
        if state is not self.state or choice is not self.choice:
            self._become(state)

    def _become(self, state: State, words: str = "") -> None:
        self.state = state
        keep(state, self.opened.job_file)
        problem = state.problem()
        if problem:
            self._say(f"murmesh: {problem}", "warning")
        elif words:
            self._say(f"murmesh: {words}")
        if not problem:
            store_job(state.document.job)  # what is exported from the window carries the job as it is now
        self._refresh()

    # -- the solution --------------------------------------------------------------------------------------------------

    @property
    def _result_file(self) -> Path:
        return self.opened.job_file.with_name(f"{self.opened.job_file.stem}_result.h5")

    def solve(self) -> None:
        """Write the case of the job as it is and solve it in a child process."""
        if self.child is not None:
            self._say("murmesh: a solution is under way; stop it first", "warning")
            return
        case = self.opened.job_file.with_name(f"{self.opened.job_file.stem}_case.h5")
        write_case(build_case(self.state.document.job, self.opened.mesh), case)
        self.child = Child(case, self._result_file)
        self._say("murmesh: solving ...")
        self._refresh()

    def stop(self) -> None:
        """Interrupt the solution; it goes on from its finished lines when it is started again."""
        if self.child is None:
            self._say("murmesh: nothing is being solved")
            return
        self._say("murmesh: stopping ...")
        self.child.stop()

    def _poll(self) -> None:
        if self.child is None:
            return
        status = self.child.status
        for line in self.child.lines():
            self._say(f"murmesh: {line.removeprefix('murmesh: ')}")
        if status is None:
            return
        child, self.child = self.child, None
        child.close()
        if status == 0:
            self.load_result()
        elif child.stopped:
            self._say("murmesh: stopped; finished lines are kept, Solve goes on from there")
        else:
            self._say(f"murmesh: the solution ended with status {status}; its last lines in the log say why", "error")
        self._refresh()

    def load_result(self) -> None:
        """Show the result beside the job, if there is one; say so where the job has changed since."""
        if not self._result_file.is_file():
            return
        try:
            start = time.perf_counter()
            result = read_result(self._result_file)
            self.views = Views(result, self.opened.scale)
            self._show(results.Choice.of(result, self.views))
            self._say(f"murmesh: {self._result_file.name} shown in {time.perf_counter() - start:.1f} s")
            if self._differs(result):
                self._say(f"murmesh: {self._result_file.name} is of another state of the job; solve again", "warning")
        except MurmeshError as error:
            self.views, self.choice = None, None
            self._say(f"murmesh: {error}", "warning")
        self._refresh()

    def _differs(self, result: Result) -> bool:
        """Whether the result is not of the job as it stands."""
        try:
            return build_case(self.state.document.job, self.opened.mesh).checksum != result.case.checksum
        except MurmeshError:
            return True

    def _show(self, choice: results.Choice) -> None:
        if self.views is None:
            return
        start = time.perf_counter()
        self.choice = results.show(self.views, choice)
        self.scene.show_surfaces(not choice.views)
        self._say(f"murmesh: {self.choice.frequency:g} Hz shown in {time.perf_counter() - start:.2f} s")

    # -- the tree ------------------------------------------------------------------------------------------------------

    def _refresh(self) -> None:
        """Bring tree, colours and window in line with the state."""
        gmsh = current_gmsh()
        held = parameters(self.state)
        if self.views is not None and self.choice is not None:
            held += results.result_parameters(self.views.result, self.choice)
        known = self._names
        entries = [*self._fixed(), *(entry.again if entry.name in known else entry.json for entry in held)]
        names = {entry["name"] for entry in entries}
        for name in self._names - names:
            gmsh.onelab.clear(name)
        gmsh.onelab.set(json.dumps(entries))
        self._shown, self._names = {parameter.name: parameter for parameter in held}, names
        self.scene.colour(self.state.kinds())
        gmsh.fltk.update()
        gmsh.graphics.draw()

    def _fixed(self) -> list[dict[str, Any]]:
        """Buttons, the state of the job, findings."""
        running = self.child is not None
        kinds = list(Boundary.registry)
        assign = {
            "name": _KIND, "type": "number", "values": [kinds.index(self._kind)], "choices": list(range(len(kinds))),
            "valueLabels": {kind: number for number, kind in enumerate(kinds)},
        }  # fmt: skip
        shown = "not saved" if self.state.changed else "saved"
        found = [
            note(f"{_FINDINGS}/{number:03d}{finding.severity}", f"{finding.subject}: {finding.message} -> {finding.cure}")
            for number, finding in enumerate(self.findings)
        ]
        return [
            note(f"{_JOB}/0File", f"{self.opened.job_file.name} ({shown})"),
            button(f"{_JOB}/1Check", "check_tags", "list what the tag check finds"),
            button(f"{_JOB}/2Save", "save", "write the job file, and the job into the .msh"),
            button(f"{_JOB}/3Undo", "undo", "take back the last change"),
            button(f"{_JOB}/4Redo", "redo", "make the change undone last again"),
            button(f"{_JOB}/5Stop", "stop", "interrupt the solution; solving again goes on from there"),
            assign,
            button(f"{SURFACES}/01Pick surfaces", "pick", "give this kind to surfaces picked in the window"),
            button(f"{LOADS}/00Add monopole", "add_monopole", "in the middle; edit its place under default, loads"),
            button(f"{LOADS}/01Remove last monopole", "remove_monopole"),
            button(f"{RECEIVERS}/00Add receiver", "add_receiver"),
            button(f"{RECEIVERS}/01Remove last receiver", "remove_receiver"),
            *found,
            *(results.ranking(self.views, self.choice) if self.views is not None and self.choice is not None else []),
            {"type": "string", "name": "ONELAB/Button", "values": _MAIN_BUTTON[running], "visible": False},
        ]  # fmt: skip

    def _database(self) -> dict[str, Any]:
        """What stands in the tree now. Asked one by one: gmsh writes quotes in texts unescaped into its JSON."""
        onelab = current_gmsh().onelab
        held = {name: _values(onelab, name) for name in (*self._shown, _KIND)}
        return {name: values[0] for name, values in held.items() if len(values)}

    def _middle(self) -> list[float]:
        nodes = self.opened.mesh.nodes
        return [float(x) for x in (nodes.min(axis=0) + nodes.max(axis=0)) / 2]

    def _say(self, text: str, level: str = "info") -> None:
        """One line in the status bar and in the message log."""
        self._log(text, level)
        current_gmsh().fltk.setStatusMessage(text.splitlines()[0] if text else "", False)

    def _log(self, text: str, level: str) -> None:
        current_gmsh().logger.write(text, level)


def _values(onelab: Any, name: str) -> list[Any]:
    numbers = onelab.getNumber(name)
    return list(numbers) if len(numbers) else list(onelab.getString(name))
