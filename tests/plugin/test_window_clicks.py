"""The window for real: gmsh under a virtual display, clicked with xdotool, asked through what it writes.

Buttons stand at the top of the tree, whose rows are 21 pixels high (gmsh 4.15 at its default font size), so that a click
finds them without looking at the picture.
"""

from __future__ import annotations

import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from murmesh.plugin import probe
from murmesh.plugin.cli import main
from murmesh.solver.errors import MissingLibraryError

_PROGRAM = "import sys; from murmesh.plugin.cli import main; sys.exit(main(sys.argv[1:]))"
_TOOLS = ("Xvfb", "xdotool")
_GEO = """
SetFactory("OpenCASCADE");
Box(1) = {0, 0, 0, 1, 0.8, 0.6};
Physical Volume("air") = {1};
Physical Surface("x0") = {1};
Physical Surface("walls") = {2, 3, 4, 5, 6};
Mesh.MeshSizeMax = 0.5;
"""
_JOB = """
[mesh]
file = "box.geo"
[regions.air]
medium = { kind = "air" }
damping = { kind = "loss_factor", value = 0.05 }
[surfaces.x0]     # the piston
kind = "vibrating"
velocity = 1e-3
[surfaces.walls]
kind = "rigid"
[[receivers]]
name = "ear"
position = [0.6, 0.5, 0.3]
[sweep]
start = 100.0
stop = 200.0
step = 10.0
field_frequencies = [150.0]
"""

_LONG = _JOB.replace("step = 10.0", 'step = 0.05\nmethod = "direct"')


@pytest.fixture
def display(gmsh_library: None) -> Iterator[str]:
    """A virtual display of its own."""
    missing = [tool for tool in _TOOLS if shutil.which(tool) is None]
    if missing:
        words = f"{' and '.join(missing)} not found: apt-get install -y xvfb xdotool"
        (pytest.fail if os.environ.get("CI") else pytest.skip)(words)
    read, write = os.pipe()
    command = ["Xvfb", "-displayfd", str(write), "-screen", "0", "1400x950x24", "-nolisten", "tcp"]
    server = subprocess.Popen(command, pass_fds=(write,), stderr=subprocess.DEVNULL)
    os.close(write)
    with os.fdopen(read) as pipe:
        number = pipe.readline().strip()
    yield f":{number}"
    server.terminate()
    server.wait(10)


class Driver:
    """A window that is clicked."""

    def __init__(self, folder: Path, display: str, job: str) -> None:
        self._environment = os.environ | {"DISPLAY": display}
        self.job = folder / "box.toml"
        if not self.job.exists():
            (folder / "box.geo").write_text(_GEO)
            self.job.write_text(job)
        command = [sys.executable, "-c", _PROGRAM, "window", str(self.job)]
        self.process = subprocess.Popen(command, env=self._environment, stdout=subprocess.PIPE, stderr=subprocess.STDOUT)
        _wait(lambda: bool(self._tool("search", "--name", "Gmsh")), "the window")
        time.sleep(1.0)
        self.window = self._tool("search", "--name", "Gmsh").split()[0]

    def _tool(self, *words: str) -> str:
        done = subprocess.run(["xdotool", *words], env=self._environment, capture_output=True, text=True, timeout=20)
        return done.stdout.strip()

    def click(self, x: int, y: int) -> None:
        """Click at pixels from the upper left corner of the window."""
        self._tool("mousemove", "--window", self.window, str(x), str(y))
        time.sleep(0.3)
        self._tool("click", "1")
        time.sleep(0.5)

    def key(self, name: str) -> None:
        self._tool("key", name)
        time.sleep(0.3)

    def enter(self, place: tuple[int, int], text: str, wanted: str) -> None:
        """Type a value over the one in a field of the tree and save; again where a busy machine was not ready for it."""
        for _ in range(4):
            self.click(*place)
            self.key("ctrl+a")
            self._tool("type", "--delay", "30", text)
            self.key("Return")
            time.sleep(0.5)
            self.click(*SAVE)
            time.sleep(0.5)
            if wanted in self.job.read_text():
                return
        raise AssertionError(f"'{text}' typed at {place} did not reach the job file:\n{self.job.read_text()}")

    def end(self) -> int:
        """End it as a person ends a program from outside."""
        self.process.send_signal(signal.SIGINT)
        try:
            return self.process.wait(20)
        finally:
            if self.process.poll() is None:
                self.process.kill()
                self.process.wait()
            if self.process.stdout is not None:
                self.process.stdout.close()


def _wait(ready: Callable[[], bool], what: str, patience: float = 40.0) -> None:
    end = time.monotonic() + patience
    while not ready():
        assert time.monotonic() < end, f"{what} did not come within {patience:g} s"
        time.sleep(0.2)


@pytest.fixture
def driver(display: str, tmp_path: Path, request: pytest.FixtureRequest) -> Iterator[Driver]:
    made = Driver(tmp_path, display, getattr(request, "param", _JOB))
    yield made
    made.end()


# pixels in the window: four modules, the legend under the fourth, then Job with its file and five buttons
CHECK, SAVE, UNDO, REDO, STOP, PICK = ((150, y) for y in (186, 207, 228, 249, 270, 328))
SOLVE, SURFACE = (380, 826), (1000, 450)
OPEN_SWEEP, OPEN_FIRST_SURFACE = (34, 560), (46, 350)
VELOCITY, STEP = (130, 387), (90, 682)  # with both of these branches open


def test_surfaces_are_picked_saved_undone_and_solved(driver: Driver) -> None:
    before = driver.job.read_text()
    driver.click(*PICK)
    driver.click(*SURFACE)
    driver.key("q")
    driver.click(*SAVE)
    _wait(lambda: driver.job.read_text() != before, "the saved job")
    saved = driver.job.read_text()
    assert saved.count("vibrating") == 2 and "# the piston" in saved
    driver.click(*UNDO)
    driver.click(*SAVE)
    _wait(lambda: driver.job.read_text() == before, "the job without the change")
    driver.click(*REDO)
    driver.click(*SAVE)
    _wait(lambda: driver.job.read_text() == saved, "the change made again")
    driver.click(*SOLVE)
    _wait(lambda: driver.job.with_name("box_result.h5").is_file(), "the result")
    assert driver.process.poll() is None


def test_what_is_typed_in_the_tree_reaches_the_job_file(driver: Driver) -> None:
    """A text and a number; the branches stay open after the first edit, or the second would find no field."""
    driver.click(*OPEN_SWEEP)
    driver.click(*OPEN_FIRST_SURFACE)
    driver.enter(VELOCITY, "2e-3", "velocity = 0.002\n")
    driver.enter(STEP, "5", "step = 5.0\n")
    assert driver.job.read_text() == _JOB.replace("1e-3", "0.002").replace("step = 10.0", "step = 5.0")


def test_what_was_not_saved_is_there_again(driver: Driver, display: str) -> None:
    driver.click(*PICK)
    driver.click(*SURFACE)
    driver.key("q")
    driver.end()
    assert driver.job.read_text() == _JOB
    unsaved = driver.job.with_name("box.unsaved.toml")
    kept = unsaved.read_text()
    assert kept.count("vibrating") == 2
    again = Driver(driver.job.parent, display, _JOB)
    try:
        again.click(*SAVE)
        _wait(lambda: again.job.read_text() == kept and not unsaved.exists(), "the change of last time")
    finally:
        again.end()


@pytest.mark.parametrize("driver", [_LONG], indirect=True)
def test_a_stopped_solution_keeps_its_lines_and_goes_on(driver: Driver) -> None:
    result = driver.job.with_name("box_result.h5")

    def lines() -> dict[str, int]:
        return {path.name: path.stat().st_mtime_ns for path in Path(f"{result}.lines").glob("*")}

    driver.click(*SOLVE)
    _wait(lambda: len(lines()) > 5, "the first lines")
    driver.click(*STOP)
    time.sleep(1.5)
    kept = lines()
    time.sleep(1.0)
    assert lines() == kept and not result.exists()
    driver.click(*SOLVE)
    _wait(lambda: len(lines()) > len(kept), "the next lines")
    now = lines()
    assert {name: now[name] for name in kept} == kept, "a finished line was solved again"


def test_no_display_is_said_at_once(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, gmsh_library: None) -> None:
    for name in ("DISPLAY", "WAYLAND_DISPLAY"):
        monkeypatch.delenv(name, raising=False)
    if sys.platform == "linux":
        with pytest.raises(MissingLibraryError, match=r"there is no display \(DISPLAY is not set\).*xvfb-run"):
            probe.require_window()
        assert main(["window", str(tmp_path / "none.msh")]) == 2


@pytest.mark.skipif(sys.platform != "linux", reason="X11 only")
def test_a_display_that_does_not_answer_is_said(monkeypatch: pytest.MonkeyPatch, gmsh_library: None) -> None:
    monkeypatch.setenv("DISPLAY", ":987")
    monkeypatch.delenv("WAYLAND_DISPLAY", raising=False)
    with pytest.raises(MissingLibraryError, match=r"cannot open on the display DISPLAY=:987.*without a window"):
        probe.require_window()
