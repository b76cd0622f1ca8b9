"""What every test starts from: no display, one thread per process, and gmsh opened and closed around each test."""

from __future__ import annotations

import os

# before numpy, matplotlib and VTK are imported by any test
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("MURMESH_THREADS", "1")
os.environ["MPLBACKEND"] = "Agg"

from collections.abc import Iterator

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
