"""gmsh opened and closed around a piece of work; geometry and scripts loaded and meshed. gmsh is imported late."""

from __future__ import annotations

import contextlib
import re
import runpy
import sys
import traceback
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from murmesh.plugin.probe import require_gmsh
from murmesh.solver.errors import CaseError, FormatError, MeshError

_KEPT_OPTIONS = ("Mesh.MeshSizeMax", "General.Terminal")
CAD = {".step", ".stp", ".brep"}
_FLATTEST = 0.05
"""Signed inverse condition number of a curved element, 1 for the best and below 0 where it folds over, that is let pass."""
_STEP_UNITS = {"": 1.0, "MILLI": 1e-3, "CENTI": 1e-2, "DECI": 0.1, "MICRO": 1e-6, "KILO": 1e3}


def current_gmsh() -> Any:
    """The gmsh module with a session and a model; MeshError if there is none."""
    require_gmsh()
    import gmsh

    if not gmsh.isInitialized():
        raise MeshError("gmsh is not initialised, so there is no current model; call gmsh.initialize() and make a model")
    return gmsh


@contextlib.contextmanager
def gmsh_session() -> Iterator[Any]:
    """gmsh with an empty model of its own; a session that was there before comes back as it was."""
    require_gmsh()
    import gmsh

    if gmsh.isInitialized():
        with _inside(gmsh):
            yield gmsh
        return
    gmsh.initialize(readConfigFiles=False, interruptible=False)
    try:
        gmsh.option.setNumber("General.Terminal", 0)
        gmsh.model.add("murmesh")
        yield gmsh
    finally:
        gmsh.finalize()


@contextlib.contextmanager
def _inside(gmsh: Any) -> Iterator[None]:
    before, current = gmsh.model.list(), gmsh.model.getCurrent()
    kept = {name: gmsh.option.getNumber(name) for name in _KEPT_OPTIONS}
    target = gmsh.option.getString("Geometry.OCCTargetUnit")
    gmsh.option.setNumber("General.Terminal", 0)
    gmsh.model.add("murmesh")
    try:
        yield
    finally:
        for name in gmsh.model.list()[len(before) :]:
            gmsh.model.setCurrent(name)
            gmsh.model.remove()
        if current in before:
            gmsh.model.setCurrent(current)
        for option, value in kept.items():
            gmsh.option.setNumber(option, value)
        gmsh.option.setString("Geometry.OCCTargetUnit", target)


def group_name(gmsh: Any, dim: int, tag: int) -> str:
    """The name of a physical group; one made of its dimension and tag where it has none."""
    name = str(gmsh.model.getPhysicalName(dim, tag)).strip()
    return name or f"{('point', 'curve', 'surface', 'volume')[dim]}_{tag}"


def open_model(path: Path, size: float | None, unit: str | None, units: Mapping[str, float]) -> float:
    """Load `path` into gmsh as the current model; returns the factor that brings its coordinates to metres."""
    gmsh = current_gmsh()
    suffix = path.suffix.lower()
    factor = units[unit or "m"]
    if suffix in (".step", ".stp"):
        # gmsh brings the file's own unit to millimetres; a stated unit replaces it. Any other target would stay in force
        # for every later export of the process (observed with gmsh 4.15)
        gmsh.option.setString("Geometry.OCCTargetUnit", "MM")
        factor = 1e-3 if unit is None else 1e-3 * units[unit] / step_unit(path)
    if size is not None:
        gmsh.option.setNumber("Mesh.MeshSizeMax", size / factor)
    if suffix == ".py":
        run_script(path)
        return factor
    try:
        gmsh.open(str(path))
    except Exception as error:
        raise FormatError(f"gmsh cannot read '{path}': {error}; export it anew, for instance as .msh 4.1") from None
    return factor


def step_unit(path: Path) -> float:
    """The length unit [m] that a STEP file states; millimetres if none is found, as gmsh assumes."""
    text = path.read_text(encoding="latin-1")
    match = re.search(r"LENGTH_UNIT\s*\(\s*\)[^;]*?SI_UNIT\s*\(\s*(?:\$|\.(\w+)\.)\s*,\s*\.METRE\.", text)
    if "CONVERSION_BASED_UNIT('INCH'" in text.replace(" ", "").upper():
        return 0.0254
    return _STEP_UNITS.get(match.group(1) or "", 1e-3) if match else 1e-3


def run_script(path: Path) -> None:
    """Run the user's own gmsh script in this process; its current model stays open, what it prints goes to stderr."""
    gmsh = current_gmsh()
    argv, folder = sys.argv, str(path.resolve().parent)
    sys.argv = [str(path)]
    sys.path.insert(0, folder)
    try:
        with _kept_open(gmsh), contextlib.redirect_stdout(sys.stderr):
            runpy.run_path(str(path), run_name="__main__")
    except SystemExit as end:
        if end.code not in (None, 0):
            raise CaseError(f"the script '{path}' ended with status {end.code}; run it by itself to see why") from None
    except Exception as error:
        at = [frame for frame in traceback.extract_tb(error.__traceback__) if frame.filename == str(path)]
        line = f", line {at[-1].lineno}" if at else ""
        raise CaseError(
            f"the script '{path}'{line} failed: {type(error).__name__}: {error}; run it by itself and mend it"
        ) from None
    finally:
        sys.argv = argv
        sys.path.remove(folder)


@contextlib.contextmanager
def _kept_open(gmsh: Any) -> Iterator[None]:
    """A script opens, closes and shows gmsh by habit: here that would lose the model or wait for a person."""
    silent = [(gmsh, name) for name in ("initialize", "finalize")]
    silent += [(gmsh.fltk, name) for name in ("run", "initialize", "wait", "update", "awake")]
    kept = [(owner, name, vars(owner)[name]) for owner, name in silent]
    for owner, name, _ in kept:
        setattr(owner, name, staticmethod(_nothing) if isinstance(owner, type) else _nothing)
    try:
        yield
    finally:
        for owner, name, value in kept:
            setattr(owner, name, value)


def _nothing(*_: object, **__: object) -> None:
    return None


def generate(path: Path, size: float | None, order: int) -> None:
    """Mesh the current model unless it already holds tetrahedra; `size` in the model's own unit."""
    gmsh = current_gmsh()
    if any(len(found) for found in gmsh.model.mesh.getElements(3)[1]):
        return
    if not gmsh.model.getEntities(3) or not gmsh.model.getEntities(2):
        raise MeshError(f"'{path}' holds no volume and no tetrahedra; make a volume of the air, not only of its surfaces")
    try:
        if size is not None:
            gmsh.option.setNumber("Mesh.MeshSizeMax", size)
        if size is not None and path.suffix.lower() in CAD:
            # CAD has no sizes of its own, and gmsh would mesh a tenth of its diagonal fine
            gmsh.model.mesh.setSize(gmsh.model.getEntities(0), size)
        gmsh.model.mesh.generate(3)
        if order == 2 or (order == 0 and _curved(gmsh)):
            gmsh.model.mesh.setOrder(2)
            _unfold(gmsh)
    except Exception as error:
        raise MeshError(
            f"gmsh cannot mesh the volumes of '{path}': {error}; heal the geometry or choose another element size"
        ) from None


def _unfold(gmsh: Any) -> None:
    """Curved elements between two curved surfaces may fold over where the gap is narrow: move their mid-edge nodes."""
    tags = [tag for found in gmsh.model.mesh.getElements(3)[1] for tag in found]
    for method in ("HighOrder", "HighOrderElastic"):
        if min(gmsh.model.mesh.getElementQualities(tags, "minSICN")) > _FLATTEST:
            return
        gmsh.model.mesh.optimize(method)


def _curved(gmsh: Any) -> bool:
    return any(gmsh.model.getType(2, tag) not in ("Plane", "Discrete surface") for _, tag in gmsh.model.getEntities(2))
