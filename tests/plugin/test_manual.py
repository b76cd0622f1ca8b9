"""The contributor guide tells the truth: map, recipes and tables are those of today; its least case is read and solved."""

from __future__ import annotations

import importlib
import re
import types
from pathlib import Path
from typing import Any

import h5py
import matplotlib.image
import numpy as np
import pytest

import meshes
import solved_box
from cases import case_of
from murmesh.plugin import cli, manual
from murmesh.plugin.check import RULES, check_case
from murmesh.plugin.cli.command import COMMANDS
from murmesh.plugin.export import EXPORTS
from murmesh.plugin.findings import acoustics
from murmesh.plugin.findings.finding import Finding
from murmesh.plugin.findings.scene import Scene
from murmesh.plugin.job_text import job_of
from murmesh.plugin.manual import FAMILIES, RECORDS, case_layout, entries, homes, table_of_kinds, with_layout
from murmesh.plugin.pictures import PICTURES
from murmesh.solver import system
from murmesh.solver.case.boundary import Boundary
from murmesh.solver.case.fields import Declared, from_tree, to_tree
from murmesh.solver.case.hdf5 import CONVENTIONS, FORMAT, VERSION, _write_tree, read_case, write_case
from murmesh.solver.case.load import Load, Monopole
from murmesh.solver.case.medium import Medium
from murmesh.solver.case.model import Mesh, Sweep
from murmesh.solver.case.porous import Fluid
from murmesh.solver.case.wall import AirGap, Layers, LimpMass, WallLaw
from murmesh.solver.errors import CaseError
from murmesh.solver.result import write_result
from murmesh.solver.sweep import solve

ROOT = Path(__file__).parents[2]
GUIDE = ROOT / "DEVELOPERS.md"
TEXT = GUIDE.read_text(encoding="utf-8")
BLOCKS = {
    match.group(1): match.group(2) for match in re.finditer(r"```python\n# into ([\w/]+)\.py[^\n]*\n(.*?)```", TEXT, re.DOTALL)
}
F = np.array([100.0, 400.0])
MEMBERS = [(cls, name) for cls in FAMILIES.values() for name in cls.registry]


# ---------------------------------------------------------------------------------------------------------------------
# the tables


def test_the_case_layout_is_that_of_today() -> None:
    assert with_layout(TEXT) == TEXT, "DEVELOPERS.md is out of date; run: python -m murmesh.plugin.manual DEVELOPERS.md"


def test_the_layout_can_be_rewritten(tmp_path: Path) -> None:
    copy = tmp_path / "guide.md"
    copy.write_text(TEXT.replace("| **`rigid`** |", "| **`soft`** |"), encoding="utf-8")
    manual.main(str(copy))
    assert copy.read_text(encoding="utf-8") == TEXT
    copy.write_text("no marks", encoding="utf-8")
    with pytest.raises(CaseError, match="has no place for the layout; put the lines '<!-- case layout"):
        manual.main(str(copy))
    assert copy.read_text(encoding="utf-8") == "no marks"


def test_the_layout_holds_every_record_and_kind_with_its_fields() -> None:
    layout = case_layout()
    for path, record in RECORDS.items():
        assert f"#### `{path}`" in layout
        assert all(f"| `{entry.name}` |" in layout for entry in entries(record))
    for cls, name in MEMBERS:
        assert f"| **`{name}`** |" in layout
        assert all(f"| `{entry.name}` |" in layout for entry in entries(cls.registry[name]))
    assert not [line for line in layout.splitlines() if line.startswith("|") and len(re.findall(r"(?<!\\)\|", line)) != 7]


def _rows(cls: type[Declared]) -> dict[str, manual.Entry]:
    return {entry.name: entry for entry in entries(cls)}


def test_entries_say_type_unit_bounds_and_default() -> None:
    mesh, sweep, given = _rows(Mesh), _rows(Sweep), _rows(WallLaw.registry["given"])
    assert mesh["nodes"] == manual.Entry("nodes", "numbers", "dataset, float64", "m", "", "required", "coordinates, (n, 3)")
    assert (mesh["triangle_surface"].stored, mesh["triangle_surface"].bounds) == ("dataset, int64", ">= -1")
    assert (sweep["order"].stored, sweep["order"].bounds, sweep["order"].default) == ("attribute, whole number", "0 .. 8", "0")
    assert (sweep["frequencies"].bounds, sweep["field_frequencies"].default) == ("> 0", "empty")
    assert given["value"].stored == "attribute, complex or group: spectrum"
    assert given["unit"].bounds == "rho_c / Pa.s/m"
    sheet = _rows(Boundary.registry["sheet"])
    assert (sheet["front"].default, sheet["front"].takes) == ("vibrating", "boundary kind")
    assert (sheet["transfer"].default, sheet["front_direction"].stored) == ("left out", "attribute, 3 numbers")
    assert _rows(WallLaw.registry["layers"])["layers"].stored == "list: layers"
    assert homes(Medium) == ["/regions/NAME/medium"]
    assert homes(WallLaw) == ["/catalogue/NAME/wall", "impedance.wall", "sheet.transfer", "vibrating_treated.wall"]


@pytest.mark.parametrize(("cls", "name"), MEMBERS)
def test_stored_says_how_the_file_holds_it(cls: Any, name: str, tmp_path: Path) -> None:
    """What the table says of a kind's entries is what h5py finds."""
    with h5py.File(tmp_path / "kind.h5", "w") as file:
        _write_tree(file, to_tree(cls.member(name).example()))
        assert file.attrs["kind"] == name
        for entry in entries(cls.member(name)):
            if entry.name in file.attrs:
                assert entry.stored.startswith("attribute")
            elif entry.name not in file:
                assert entry.default == "left out"
            elif isinstance(file[entry.name], h5py.Dataset):
                assert entry.stored == f"dataset, {file[entry.name].dtype.name}"
            elif file[entry.name].attrs.get("list", False):
                assert entry.stored.startswith("list: ")
            else:
                assert "group: " in entry.stored and "kind" in file[entry.name].attrs


def test_one_family_can_be_listed() -> None:
    listed = table_of_kinds("boundary kinds")
    assert "BOUNDARY KINDS" in listed and "MEDIA" not in listed
    assert re.search(r"wall +wall law +required +impedance law of the wall", listed)
    assert re.search(r"frame +auto / face / bonded / at_rest +default auto +how", listed)
    with pytest.raises(CaseError, match="no family is called 'walls'; expected one of boundary kinds, loads"):
        table_of_kinds("walls")


def test_the_list_of_kinds_fits_a_terminal() -> None:
    assert max(len(line) for line in table_of_kinds().splitlines()) <= 127


# ---------------------------------------------------------------------------------------------------------------------
# the file


def test_the_least_case_is_read_and_solved(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    found = re.search(r"```python\n(# the least a case needs.*?)```", TEXT, re.DOTALL)
    assert found and len(found.group(1).splitlines()) <= 25
    monkeypatch.chdir(tmp_path)
    exec(compile(found.group(1), "DEVELOPERS.md", "exec"), {})
    case = read_case(tmp_path / "least.h5")
    assert not [finding for finding in check_case(case) if finding.severity == "error"]
    assert solve(case).mean_square("ear")[0] > 0


def test_root_attributes_are_named(tmp_path: Path) -> None:
    assert f'`format` = "{FORMAT}" and `version` = {VERSION}' in TEXT
    write_case(solved_box.case(), tmp_path / "case.h5")
    with h5py.File(tmp_path / "case.h5") as file:
        own = set(file.attrs) - {"format", "version", "checksum", "title", "catalogue"}  # the last: an empty list
    assert own == {f"convention_{name}" for name in CONVENTIONS}
    assert all(f"_{name}`" in TEXT for name in CONVENTIONS)


def test_the_result_file_is_described_whole(tmp_path: Path) -> None:
    write_result(solved_box.result(), tmp_path / "result.h5")
    section = TEXT.partition("### The result file")[2].partition("###")[0]
    with h5py.File(tmp_path / "result.h5") as file:
        held = file["load_cases/0000"]
        for name in (*file.attrs, *file, *held.attrs, *held):
            assert re.search(rf"[`/]{name}\b", section), f"'{name}' of the result file is not described in DEVELOPERS.md"


# ---------------------------------------------------------------------------------------------------------------------
# the map


def test_every_module_is_on_the_map_and_nothing_else() -> None:
    drawn = re.search(r"```\n(solver/ .*?)```", TEXT, re.DOTALL)
    assert drawn
    named = set(re.findall(r"\b(\w+)\.py", drawn.group(1)))
    files = [path for room in ("solver", "plugin", "sample_geometry") for path in (ROOT / room).rglob("*.py")]
    free = ("pictures", "export", "cli")  # their members are found by themselves
    needed = {path.stem for path in files if path.parent.name not in free and path.stem != "__init__"}
    assert needed <= named, f"not on the map of DEVELOPERS.md: {', '.join(sorted(needed - named))}"
    assert named <= {path.stem for path in files}, "the map of DEVELOPERS.md names modules that do not exist"


@pytest.mark.parametrize("words", sorted(set(re.findall(r"`(system|medium|model|check|describe|files|manual)\.(\w+)`", TEXT))))
def test_names_in_the_text_exist(words: tuple[str, str]) -> None:
    modules = {"system": "solver.system", "medium": "solver.case.medium", "model": "solver.case.model"}
    module = importlib.import_module(f"murmesh.{modules.get(words[0], f'plugin.{words[0]}')}")
    assert words[1] == "py" or hasattr(module, words[1])


# ---------------------------------------------------------------------------------------------------------------------
# the recipes


def _run(place: str) -> dict[str, Any]:
    """A recipe executed where its first line says: among the names of a module, or as a new one."""
    path = ROOT / f"{place}.py"
    name = f"murmesh.{place.replace('/', '.')}"
    space = dict(vars(importlib.import_module(name))) if path.is_file() else {"__name__": name}
    exec(compile(BLOCKS[place], f"{GUIDE.name}, {place}", "exec"), space)  # with this file's own `annotations`
    return space


def _declare(place: str, family: type[Declared], monkeypatch: pytest.MonkeyPatch) -> type[Any]:
    """The one kind that a recipe adds to its family; the registry is put back afterwards."""
    before = dict(family.registry)
    monkeypatch.setattr(family, "registry", dict(before))
    _run(place)
    [added] = family.registry.keys() - before.keys()
    made: Any = family.member(added)
    tree = to_tree(made.example())
    assert repr(to_tree(from_tree(family, tree))) == repr(tree)
    assert f"\n  {added}\n" in table_of_kinds()
    return made  # type: ignore[no-any-return]


def test_every_recipe_is_tried() -> None:
    tried = re.findall(r"(?:_run|_declare)\(\"([\w/]+)\"", Path(__file__).read_text(encoding="utf-8"))
    assert set(BLOCKS) == set(tried)


def test_recipe_for_a_boundary_kind(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    curtain = _declare("solver/case/boundary", Boundary, monkeypatch)
    case = solved_box.case(sheet=False)
    surfaces = tuple(s.with_(boundary=curtain.example()) if s.name == "y1" else s for s in case.surfaces)
    write_case(case.with_(surfaces=surfaces), tmp_path / "case.h5")
    result = solve(read_case(tmp_path / "case.h5"))
    taken = result.load_cases[0].absorbed[:, result.power_labels.index("surface/y1")]
    assert np.all(taken > 0)
    job = job_of({"surfaces": {"window": {"kind": "curtain", "resistance": 400.0, "mass": 1.2}}})
    assert isinstance(job.surfaces[0].boundary, curtain)


def test_recipe_for_a_medium(monkeypatch: pytest.MonkeyPatch) -> None:
    gas = _declare("solver/case/medium", Medium, monkeypatch)
    air = gas(28.9647e-3, 1.4).reference
    assert air.speed == pytest.approx(343.2, abs=0.1) and air.density == pytest.approx(1.204, abs=0.001)
    assert air.density * air.speed**2 == pytest.approx(air.heat_ratio * air.pressure)


def test_recipe_for_a_wall_law(monkeypatch: pytest.MonkeyPatch) -> None:
    foil = _declare("solver/case/wall", WallLaw, monkeypatch)
    stack, fluid = Layers((LimpMass(0.8), AirGap(0.05))), Fluid(1.2, 340.0)
    assert np.allclose(foil(0.8, 0.05).admittance(F, fluid), stack.admittance(F, fluid))


def test_recipe_for_a_load(monkeypatch: pytest.MonkeyPatch) -> None:
    """A line of no length is a monopole; one along the source's own axis is not."""
    line = _declare("solver/case/load", Load, monkeypatch)
    term = _run("solver/system")["_line_term"]
    known = system._load_terms
    both = lambda space, load: [term(space, load)] if isinstance(load, line) else known(space, load)  # noqa: E731
    monkeypatch.setattr(system, "_load_terms", both)
    at = (0.2, 0.3, 0.25)
    point = Monopole("pipe", at, 1e-3)
    answers = [_heard(load) for load in (point, line("pipe", at, at, 1e-3), line("pipe", at, (0.4, 0.3, 0.25), 1e-3))]
    assert answers[1] == pytest.approx(answers[0], rel=1e-9)
    assert abs(answers[2] - answers[0]) > 0.01 * abs(answers[0])
    with pytest.raises(CaseError, match="the line source 'pipe' leaves the fluid; move its ends"):
        _heard(line("pipe", at, (2.0, 0.3, 0.25), 1e-3))


def _heard(load: Any) -> complex:
    case = case_of(meshes.box(2, 2, 2), {}, [load], F, {"ear": (0.7, 0.6, 0.5)}, order=3)
    return complex(solve(case).load_cases[0].contributions[1, 0, 0])


def test_recipe_for_a_picture(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setattr(PICTURES, "_members", {})
    _run("plugin/pictures/plain_spectrum")
    [picture] = PICTURES._members.values()
    image = matplotlib.image.imread(picture.make(solved_box.result(), tmp_path / picture.file_name, load_case="idle"))
    assert image.shape[1] == 1400


def test_recipe_for_an_export(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setattr(EXPORTS, "_members", {})
    _run("plugin/export/receivers_csv")
    [export] = EXPORTS._members.values()
    lines = export.make(solved_box.result(), tmp_path / export.file_name).read_text().splitlines()
    assert [line for line in lines if not line.startswith("#")] == [
        "receiver,x_m,y_m,z_m", "left_ear,0.3,0.5,0.3", "right_ear,0.7,0.5,0.3",
    ]  # fmt: skip


def test_recipe_for_a_subcommand(monkeypatch: pytest.MonkeyPatch, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    cli._parser()
    before = dict(COMMANDS)
    _run("plugin/cli/ears")
    try:
        write_case(solved_box.case(), tmp_path / "case.h5")
        assert cli.main(["ears", str(tmp_path / "case.h5")]) == 0
    finally:
        added = COMMANDS.keys() - before.keys()
        for name in added:
            del COMMANDS[name]
    assert added == {"ears"}
    assert re.search(r"left_ear +0.3 +0.5 +0.3", capsys.readouterr().out)


def test_recipe_for_a_finding() -> None:
    rule = _run("plugin/findings/acoustics")["receiverless"]
    assert isinstance(rule, types.FunctionType) and acoustics.unloaded in RULES
    [found] = rule(Scene(solved_box.case().with_(receivers=())))
    assert isinstance(found, Finding) and found.cure
    assert list(rule(Scene(solved_box.case()))) == []
