"""Are the system libraries there that gmsh and the pictures need? Asked in a child process, once.

Without its libraries `import gmsh` raises OSError, and the first picture drawn kills the interpreter outright
(observed with VTK 9.7 on Debian 12: no exception to catch). So a child process tries it first, and a person is told
which line cures it.
"""

from __future__ import annotations

import functools
import os
import signal
import subprocess
import sys

from murmesh.solver.errors import MissingLibraryError

_APT = "apt-get install -y --no-install-recommends"
GMSH_CURE = f"{_APT} libglu1-mesa libgl1 libxcursor1 libxft2 libxinerama1 libgomp1"
RENDERING_CURE = f"{_APT} libegl1 libgl1 libgl1-mesa-dri libxcursor1"

# Draws off screen whether or not there is a display; elsewhere than on Linux VTK chooses by itself.
OFF_SCREEN = {"VTK_DEFAULT_OPENGL_WINDOW": "vtkEGLRenderWindow"} if sys.platform == "linux" else {}

_GMSH_CHILD = "import gmsh"
_WINDOW_CHILD = """
import gmsh
gmsh.initialize(readConfigFiles=False, interruptible=False)
gmsh.option.setNumber("General.Terminal", 0)
gmsh.fltk.initialize()
"""
_RENDERING_CHILD = """
import pyvista
plotter = pyvista.Plotter(off_screen=True, window_size=(32, 32))
plotter.add_mesh(pyvista.Sphere(), color="red")
if plotter.screenshot(return_img=True).std() == 0.0:
    raise SystemExit("the picture came out blank")
"""
_WINDOW_PATIENCE = 60.0
_PATIENCE = 120.0  # seconds: a cold import on a slow disk takes tens of seconds


@functools.cache
def gmsh_missing() -> str | None:
    """None if gmsh can be imported, else one message with what failed and the line that cures it."""
    return _message("gmsh cannot be loaded", _failure(_GMSH_CHILD), "gmsh", GMSH_CURE)


@functools.cache
def rendering_missing() -> str | None:
    """None if a picture can be drawn off screen, else one message with what failed and the line that cures it."""
    return _message("no picture can be drawn", _failure(_RENDERING_CHILD), "pyvista", RENDERING_CURE)


def require_gmsh() -> None:
    """Raises MissingLibraryError with the cure if gmsh cannot be imported."""
    if message := gmsh_missing():
        raise MissingLibraryError(message)


def require_window() -> None:
    """Raises MissingLibraryError with the cure if gmsh's window cannot open: no display, or one that does not answer."""
    require_gmsh()
    displays = [name for name in ("DISPLAY", "WAYLAND_DISPLAY") if os.environ.get(name)]
    if sys.platform == "linux" and not displays:
        raise MissingLibraryError(
            "gmsh's window cannot open: there is no display (DISPLAY is not set). Run it in a desktop session, over `ssh -X`, "
            "or under `xvfb-run -a`; without a window `murmesh check`, `solve` and `draw` do the same work."
        )
    if failure := _failure(_WINDOW_CHILD, _WINDOW_PATIENCE):
        shown = ", ".join(f"{name}={os.environ[name]}" for name in displays)
        raise MissingLibraryError(
            f"gmsh's window cannot open on the display {shown}: {failure}. Check that the display is there and that you may "
            "use it (`xdpyinfo`); without a window `murmesh check`, `solve` and `draw` do the same work."
        )


def require_rendering() -> None:
    """Choose off-screen drawing for this process, as it was probed; call it before pyvista is imported.

    Raises MissingLibraryError with the cure if no picture can be drawn.
    """
    if message := rendering_missing():
        raise MissingLibraryError(message)
    os.environ.update(OFF_SCREEN)


def _message(what: str, failure: str | None, package: str, line: str) -> str | None:
    if failure is None:
        return None
    if "ModuleNotFoundError" in failure:
        return f"{what}: {failure}. Install the Python package: `{sys.executable} -m pip install {package}`."
    return (
        f"{what}: {failure}. System libraries are missing: on Debian or Ubuntu run, as root, `{line}`; "
        "on other systems install the packages that hold the same libraries (OpenGL, GLU, EGL, X11)."
    )


def _failure(program: str, patience: float = _PATIENCE) -> str | None:
    """Run a Python program in a child process: None if it ended well, else how it failed, in a few words."""
    command = [sys.executable, "-P", "-c", program]
    try:
        done = subprocess.run(
            command, capture_output=True, text=True, errors="replace", timeout=patience, env=os.environ | OFF_SCREEN
        )
    except subprocess.TimeoutExpired:
        return f"no answer within {patience:g} s"
    if done.returncode == 0:
        return None
    if done.returncode < 0:
        return f"the attempt was killed by {signal.Signals(-done.returncode).name}"
    lines = done.stderr.strip().splitlines()
    return lines[-1].rstrip(".") if lines else f"the attempt ended with status {done.returncode}"
