"""Imports go one way, each room keeps to its libraries, and every package is in the wheel's list."""

from __future__ import annotations

import ast
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
CASE = tuple(
    [
        "fields",
        "expression",
        "spectrum",
        "porous",
        "wall",
        "medium",
        "motion",
        "load",
        "boundary",
        "catalogue",
        "model",
        "hdf5",
    ]
)
# from the ground up: a module imports only what stands in a row above its own, or beside it
ROWS: tuple[tuple[str, ...], ...] = (
    ("solver.errors",),
    *((f"solver.case.{name}",) for name in CASE),
    ("solver.levels",),
    ("solver.elements.quadrature",),
    ("solver.elements.tetrahedron", "solver.elements.location", "solver.elements.infinite"),
    ("solver.elements.geometry",),
    ("solver.topology",),
    ("solver.dofs", "solver.orders"),
    ("solver.volumes", "solver.faces"),
    ("solver.assembly",),
    ("solver.envelope",),
    ("solver.exterior",),
    ("solver.space", "solver.scan"),
    ("solver.receiver_points", "solver.memory", "solver.bands"),
    ("solver.linalg",),
    ("solver.system",),
    ("solver.power",),
    ("solver.engine",),
    ("solver.reduced", "solver.accuracy"),
    ("solver.result", "solver.journal"),
    ("solver.radiation", "solver.transmission"),
    ("solver.sweep", "solver.modes", "solver.contribution"),
    ("solver.damped_modes", "solver.treatment"),
    ("solver.trace_tables",),
    ("solver.whatif",),
    ("solver.choice", "solver.uncertainty"),
    ("solver.__main__", "sample_geometry"),
    ("plugin.probe", "plugin.files", "plugin.products", "plugin.summary"),
    ("plugin.gmsh_session", "plugin.tables"),
    ("plugin.wrapping",),
    ("plugin.manual",),
    ("plugin.mesh_source",),
    ("plugin.job_files", "plugin.job", "plugin.job_text"),
    ("plugin.skin", "plugin.findings.finding"),
    ("plugin.resolve",),
    ("plugin.model", "plugin.findings"),
    ("plugin.check",),
    ("plugin.load", "plugin.describe", "plugin.declared", "plugin.fields", "plugin.sampling"),
    ("plugin.study", "plugin.compare", "plugin.balance", "plugin.audio", "plugin.transmission", "plugin.directivity"),
    ("plugin.variants",),
    ("plugin.pictures", "plugin.export"),
    ("plugin.gmsh_views", "plugin.report"),
    ("plugin.script",),
    ("plugin.cli", "plugin.window"),
)
SOLVER_LIBRARIES = {"numpy", "scipy", "h5py", "rslab", "pymetis"}
MODULES = sorted(path for room in ("solver", "plugin", "sample_geometry") for path in (ROOT / room).rglob("*.py"))


def _name(path: Path) -> str:
    return ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__")


def _imports(path: Path) -> set[str]:
    found: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module:
            found.add(node.module)
            found |= {f"{node.module}.{alias.name}" for alias in node.names}
    return found


def _row(name: str) -> int:
    for index, row in enumerate(ROWS):
        if any(name == entry or name.startswith(f"{entry}.") for entry in row):
            return index
    return -1


@pytest.mark.parametrize("path", MODULES, ids=_name)
def test_imports_go_one_way(path: Path) -> None:
    own = _row(_name(path))
    if path.name == "__init__.py" and own < 0:
        return  # a room's or a package's door
    assert own >= 0, f"{_name(path)} has no row in ROWS; say where it stands"
    for name in _imports(path):
        if name.startswith("murmesh."):
            row = _row(name.removeprefix("murmesh."))
            assert row <= own, f"{_name(path)} must not import {name}"


@pytest.mark.parametrize("path", [p for p in MODULES if _name(p).startswith("solver")], ids=_name)
def test_the_solver_needs_its_own_libraries_only(path: Path) -> None:
    import sys

    roots = {name.split(".")[0] for name in _imports(path)}
    assert roots <= SOLVER_LIBRARIES | {"murmesh"} | set(sys.stdlib_module_names)


def test_every_package_is_in_the_wheel() -> None:
    listed = tomllib.loads((ROOT / "pyproject.toml").read_text())["tool"]["setuptools"]["packages"]
    folders = {path.parent.relative_to(ROOT) for path in MODULES if path.name == "__init__.py"}
    assert {f"murmesh.{'.'.join(folder.parts)}" for folder in folders} == set(listed)
