"""The probes tell a broken machine from a good one; children that fail stand in for missing libraries."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterator

import pytest

from murmesh.plugin import probe
from murmesh.solver.errors import MissingLibraryError

SEGFAULT = "import os, signal; os.kill(os.getpid(), signal.SIGSEGV)"
NO_GLU = "raise OSError('libGLU.so.1: cannot open shared object file: No such file or directory')"
NO_PACKAGE = "raise ModuleNotFoundError(\"No module named 'gmsh'\")"
BLANK = "raise SystemExit('the picture came out blank')"

Require = Callable[[], None]


@pytest.fixture(autouse=True)
def _fresh() -> Iterator[None]:
    """Each test probes anew, and leaves no faked answer behind."""
    probe.gmsh_missing.cache_clear()
    probe.rendering_missing.cache_clear()
    yield
    probe.gmsh_missing.cache_clear()
    probe.rendering_missing.cache_clear()


def test_missing_library_names_it_and_the_line_that_cures_it(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(probe, "_GMSH_CHILD", NO_GLU)
    with pytest.raises(MissingLibraryError, match=r"libGLU\.so\.1.*apt-get install .*libglu1-mesa.*libgomp1`"):
        probe.require_gmsh()


def test_missing_package_is_cured_by_pip_not_by_the_system(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(probe, "_GMSH_CHILD", NO_PACKAGE)
    with pytest.raises(MissingLibraryError, match="-m pip install gmsh") as caught:
        probe.require_gmsh()
    assert "apt-get" not in str(caught.value)


@pytest.mark.skipif(sys.platform == "win32", reason="there are no signals to die of")
def test_a_crash_in_the_child_is_a_missing_library(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(probe, "_RENDERING_CHILD", SEGFAULT)
    with pytest.raises(MissingLibraryError, match=r"killed by SIGSEGV.*apt-get install .*libegl1"):
        probe.require_rendering()


def test_a_blank_picture_is_no_picture(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(probe, "_RENDERING_CHILD", BLANK)
    assert "came out blank" in (probe.rendering_missing() or "")


def test_a_silent_failure_gives_its_status() -> None:
    assert probe._failure("raise SystemExit(7)") == "the attempt ended with status 7"


def test_a_child_that_hangs_is_given_up() -> None:
    assert probe._failure("import time; time.sleep(60)", patience=0.2) == "no answer within 0.2 s"


def test_a_good_machine_is_asked_once(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(probe, "_GMSH_CHILD", "pass")
    assert probe.gmsh_missing() is None
    monkeypatch.setattr(probe, "_GMSH_CHILD", NO_GLU)
    assert probe.gmsh_missing() is None
    probe.require_gmsh()


@pytest.mark.skipif(sys.platform != "linux", reason="VTK chooses the window by itself")
def test_drawing_stays_off_screen_as_it_was_probed(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(probe, "_RENDERING_CHILD", "pass")
    monkeypatch.setenv("VTK_DEFAULT_OPENGL_WINDOW", "vtkXOpenGLRenderWindow")
    probe.require_rendering()
    assert os.environ["VTK_DEFAULT_OPENGL_WINDOW"] == "vtkEGLRenderWindow"


def test_this_machine_loads_gmsh_and_draws(gmsh_library: None, rendering: None) -> None:
    probe.require_gmsh()
    probe.require_rendering()
