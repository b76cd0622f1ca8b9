"""What every test starts from: no display, one thread per process, and gmsh opened and closed around each test."""

from __future__ import annotations

import os

# before numpy, matplotlib and VTK are imported by any test
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("MURMESH_THREADS", "1")
os.environ["MPLBACKEND"] = "Agg"

import shutil
import subprocess
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from murmesh.plugin import probe

os.environ.update(probe.OFF_SCREEN)


def _insist(missing: str | None) -> None:
    """Skip with the cure where a system library is missing; on the build machine that is a failure."""
    if missing is not None:
        (pytest.fail if os.environ.get("CI") else pytest.skip)(missing)


@pytest.fixture
def gmsh_model() -> Iterator[None]:
    """An initialised, silent gmsh with an empty model; `import gmsh` inside the test."""
    _insist(probe.gmsh_missing())
    import gmsh

    gmsh.initialize(readConfigFiles=False, interruptible=False)
    gmsh.option.setNumber("General.Terminal", 0)
    gmsh.model.add("test")
    yield
    if gmsh.isInitialized():
        gmsh.finalize()


@pytest.fixture
def gmsh_library() -> None:
    """gmsh can be imported; the code under test opens its own session."""
    _insist(probe.gmsh_missing())


@pytest.fixture
def rendering() -> None:
    """Pictures can be drawn off screen; import pyvista inside the test."""
    _insist(probe.rendering_missing())


@pytest.fixture
def browser(tmp_path: Path) -> Callable[..., tuple[str, str]]:
    """`open(page, *words) -> (standard output, console)` in a headless browser that can reach no network."""
    found = shutil.which("chromium") or shutil.which("google-chrome")
    _insist(None if found else "no Chromium is here; apt-get install -y --no-install-recommends chromium")

    def opened(page: Path, *words: str) -> tuple[str, str]:
        offline = "--host-resolver-rules=MAP * ~NOTFOUND"
        command = [
            str(found),
            "--headless=new",
            "--no-sandbox",
            "--disable-gpu",
            offline,
            f"--user-data-dir={tmp_path / 'profile'}",
        ]
        command += ["--enable-logging=stderr", "--hide-scrollbars", *words, page.as_uri()]
        done = subprocess.run(command, capture_output=True, text=True, timeout=90, check=True)
        return done.stdout, "\n".join(line for line in done.stderr.splitlines() if "CONSOLE" in line)

    return opened
