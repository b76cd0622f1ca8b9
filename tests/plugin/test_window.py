"""What the window knows and does, without a display: documents, rows, state, tree, views, scripts, the child."""

from __future__ import annotations

import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import solved_box
import tagged
from murmesh.plugin import script
from murmesh.plugin.check import check
from murmesh.plugin.gmsh_views import PHASES, Views, plane_grid
from murmesh.plugin.job import Job
from murmesh.plugin.job_text import toml_text
from murmesh.plugin.mesh_source import job_stored_in
from murmesh.plugin.pictures.style import HAIR
from murmesh.plugin.window import palette, results, tree
from murmesh.plugin.window.child import Child
from murmesh.plugin.window.document import REMOVED, Document
from murmesh.plugin.window.opening import open_files
from murmesh.plugin.window.parameters import Row, kind_rows, read_back, starting_tree
from murmesh.plugin.window.state import State, keep, save, taken_up, unsaved_file
from murmesh.solver.case.boundary import Boundary
from murmesh.solver.case.fields import from_tree
from murmesh.solver.case.hdf5 import read_case, write_case
from murmesh.solver.case.medium import Damping, Medium
from murmesh.solver.errors import CaseError, FieldError, FormatError, ResultError
from murmesh.solver.result import read_result

CAB = Path(__file__).parents[2] / "sample_geometry"
TEXT = """\
title = "box"   # of the tests
[regions.air]
medium = { kind = "air" }   # dry?
damping = { kind = "loss_factor", value = 0.02 }

# all walls
[surfaces."x*"]
kind = "rigid"
[surfaces.z0]
kind = "vibrating"
velocity = [
]

[[receivers]]   # one ear
name = "ear"
position = [0.5, 0.3, 0.3]
# the end of the ear
[sweep]
start = 50.0
stop = 200.0
step = 50.0     # coarse
"""
DOCUMENT = Document(TEXT.replace("velocity = [\n]\n", "velocity = 1e-3\n"))
STATE = State(DOCUMENT, ("x0", "x1", "y0", "z0"), ("air",), saved=DOCUMENT.text)


def _row(rows: Any, *path: str | int) -> Row:
    return next(row for row in (held[1] if isinstance(held, tuple) else held for held in rows) if row.path == path)


# ---------------------------------------------------------------------------------------------------------------------
# the document


@pytest.mark.parametrize(
    ("path", "value", "old", "new"),
    [
        (("sweep", "step"), 25.0, "step = 50.0     # coarse", "step = 25.0     # coarse"),
        (("sweep", "order"), 3, "step = 50.0     # coarse\n", "step = 50.0     # coarse\norder = 3\n"),
        (("regions", "air", "medium", "temperature"), 25.0, '{ kind = "air" }', '{kind = "air", temperature = 25.0}'),
        (("receivers", 0, "radius"), 0.05, "0.3, 0.3]\n", "0.3, 0.3]\nradius = 0.05\n"),
        (("surfaces", "z0", "velocity"), REMOVED, "velocity = 1e-3\n", ""),
        (("title",), "a # b", 'title = "box"', 'title = "a # b"'),
    ],
)
def test_an_edit_changes_its_value_alone(path: tuple[str | int, ...], value: Any, old: str, new: str) -> None:
    changed = DOCUMENT.with_value(path, value)
    assert changed.text == DOCUMENT.text.replace(old, new)
    assert not changed.rewritten


def test_values_over_several_lines_are_replaced_whole() -> None:
    document = Document(TEXT).with_value(("surfaces", "z0", "velocity"), 2.0)
    assert document.text == TEXT.replace("velocity = [\n]", "velocity = 2.0")


def test_tables_come_beside_their_kin_and_go_without_their_neighbours() -> None:
    more = DOCUMENT.with_table(("receivers", 1), {"name": "other", "position": [0.1, 0.1, 0.1]})
    assert more.text.index('name = "other"') < more.text.index("[sweep]") and not more.rewritten
    assert "# the end of the ear" in more.text
    less = more.with_table(("receivers", 0), REMOVED)
    assert [entry["name"] for entry in less.tree["receivers"]] == ["other"]
    assert less.value(("sweep", "step")) == 50.0 and less.value(("sweep", "none", 3)) is None


def test_text_that_cannot_be_edited_in_place_is_written_anew() -> None:
    document = Document("sweep.start = 1.0\nsweep.stop = 2.0\n").with_value(("sweep", "stop"), 3.0)
    assert document.rewritten and document.tree == {"sweep": {"start": 1.0, "stop": 3.0}}
    with pytest.raises(FormatError, match="not a TOML file"):
        _ = Document("a = ").tree


# ---------------------------------------------------------------------------------------------------------------------
# rows


@pytest.mark.parametrize("family", [Boundary, Medium, Damping])
def test_every_kind_starts_sound_and_has_its_fields_as_rows(family: Any) -> None:
    for name in family.registry:
        held = starting_tree(family, name, {})
        assert from_tree(family, held).kind_name == name
        rows = list(kind_rows(family, held, ("x",), "boundary"))
        assert rows[0].choices == tuple(family.registry) and rows[0].value == name
        assert {str(row.path[1]) for row in rows[1:]} == set(family.registry[name].__dataclass_fields__)
        for row in rows:
            assert row.help or row.family is not None
            assert read_back(row, row.value) is not None


def test_rows_carry_unit_bounds_and_help() -> None:
    row = _row(STATE.volume_rows("air"), "regions", "air", "medium", "temperature")
    assert (row.title, row.low, row.high, row.value, row.form) == ("temperature [degC]", -40.0, 80.0, 20.0, "number")


@pytest.mark.parametrize(
    ("form", "shown", "value"),
    [
        ("toml", "4-6j", {"re": 4.0, "im": -6.0}),
        ("toml", "[1.0, 2]", [1.0, 2]),
        ("toml", '{ csv = "a.csv" }', {"csv": "a.csv"}),
        ("toml", "", REMOVED),
        ("flag", 1.0, True),
        ("whole", 3.0, 3),
        ("choice", "auto", "auto"),
    ],
)
def test_values_are_read_as_a_person_means_them(form: str, shown: Any, value: Any) -> None:
    assert read_back(Row(("x",), "x", "", form), shown) == value


def test_a_value_that_cannot_be_read_is_refused() -> None:
    with pytest.raises(FieldError, match=r"velocity \[m/s\]: 'fast!' cannot be read; write a number"):
        read_back(Row(("x",), "velocity", "", "toml", unit="m/s"), "fast!")


# ---------------------------------------------------------------------------------------------------------------------
# the state


def test_assigning_is_one_change_and_can_be_undone() -> None:
    state = STATE.assigned(["x0", "z0"], "impedance")
    assert state.kinds() == {"x0": "impedance", "x1": "rigid", "y0": "", "z0": "impedance"}
    assert "velocity" not in state.document.tree["surfaces"]["z0"], "a wall at rest carries no velocity"
    assert state.changed and "# all walls" in state.document.text
    assert state.undone().document.text == DOCUMENT.text and not state.undone().changed
    assert STATE.undone() is STATE


def test_what_was_undone_is_made_again_until_something_else_is_changed() -> None:
    state = STATE.assigned(["x0"], "impedance").assigned(["x1"], "impedance")
    back = state.undone().undone()
    assert back.document == DOCUMENT and back.redone().redone().document == state.document
    assert back.with_receiver((0, 0, 0)).future == () and STATE.redone() is STATE


def test_changes_that_were_not_saved_are_there_again(tmp_path: Path) -> None:
    path = tmp_path / "box.toml"
    changed = STATE.assigned(["x0"], "impedance")
    keep(STATE, path)
    assert not unsaved_file(path).exists(), "nothing was changed"
    keep(changed, path)
    again = taken_up(STATE, path)
    assert again.document.text == changed.document.text and again.undone().document == STATE.document
    keep(again.undone(), path)
    assert not unsaved_file(path).exists() and taken_up(STATE, path) is STATE
    keep(again, path)
    save(again, path)
    assert [file.name for file in tmp_path.iterdir()] == ["box.toml"]


def test_a_loaded_surface_keeps_the_load_that_its_new_kind_can_carry() -> None:
    state = STATE.assigned(["z0"], "vibrating_treated")
    assert state.document.tree["surfaces"]["z0"]["velocity"] == 1e-3
    assert not state.problem()


def test_rows_change_what_they_show() -> None:
    state = STATE.with_row(_row(STATE.surface_rows("x1"), "surfaces", "x1", "kind"), "vibrating")
    state = state.with_row(_row(state.surface_rows("x1"), "surfaces", "x1", "velocity"), "2e-3")
    state = state.with_row(_row(state.sweep_rows(), "sweep", "accuracy"), 0.5)
    state = state.with_row(_row(state.volume_rows("air"), "regions", "air", "damping", "kind"), "reverberation_time")
    state = state.with_row(_row(state.receiver_rows(), "receivers", 0, "name"), "left")
    state = state.with_row(_row(state.load_rows(), "loads", "spectrum"), "tones")
    job = state.document.job
    assert [load.acts_on for load in job.loads.loads] == ["z0", "x1"] and job.loads.spectrum == "tones"
    assert job.require_sweep().accuracy == 0.5 and job.receivers[0].name == "left"
    assert len(state.past) == 6 and "# coarse" in state.document.text


def test_receivers_come_and_go() -> None:
    state = STATE.with_receiver((0.1, 0.2, 0.3)).with_receiver((0.2, 0.2, 0.3))
    assert [receiver.name for receiver in state.document.job.receivers] == ["ear", "receiver_1", "receiver_2"]
    assert [receiver.name for receiver in state.without_receiver().document.job.receivers] == ["ear", "receiver_1"]


def test_monopoles_come_are_moved_and_go() -> None:
    state = STATE.with_monopole((0.1, 0.2, 0.3)).with_monopole((0.2, 0.2, 0.3))
    assert not state.problem() and "# coarse" in state.document.text
    row = _row(state.load_rows(), "loads", "loads")
    state = state.with_row(row, str(row.value).replace("[0.2, 0.2, 0.3]", "[0.4, 0.2, 0.3]"))
    found = [entry for entry in state.document.tree["loads"]["loads"] if entry["kind"] == "monopole"]
    assert [(entry["label"], entry["position"][0]) for entry in found] == [("monopole_1", 0.1), ("monopole_2", 0.4)]
    assert len(state.document.job.loads.loads) == 3, "two monopoles and the vibrating wall"
    assert state.without_monopole().without_monopole().document.value(("loads", "loads")) is None
    assert STATE.without_monopole() is STATE


def test_a_job_that_makes_no_sense_is_said_and_not_saved(tmp_path: Path) -> None:
    state = STATE.with_row(_row(STATE.sweep_rows(), "sweep", "start"), 900.0)
    assert "give 0 < start <= stop" in state.problem()
    with pytest.raises(FieldError, match="start <= stop"):
        save(state, tmp_path / "box.toml")
    assert not list(tmp_path.iterdir())
    assert not save(STATE.with_receiver((0, 0, 0)), tmp_path / "box.toml").changed
    assert len(Job.from_toml(tmp_path / "box.toml").receivers) == 2


def test_findings_are_those_of_the_check() -> None:
    state = State(Document(toml_text(tagged.job())), saved="")
    assert state.findings(tagged.tagged()) == check(tagged.job(), tagged.tagged())
    broken = state.changed_to(state.document.with_table(("surfaces", "x0"), REMOVED))
    assert any(finding.severity != "note" for finding in broken.findings(tagged.tagged()))


# ---------------------------------------------------------------------------------------------------------------------
# the tree and the legend


def test_the_tree_survives_gmsh_and_shows_no_edit_of_its_own(gmsh_model: None) -> None:
    """The database gives back what was put into it: quotes, slashes, choices."""
    import json

    import gmsh

    text = (CAB / "cab.toml").read_text(encoding="utf-8")
    state = State(Document(text, CAB), ("roof", "seat", "2nd/wall"), ("cabin_air",), saved=text)
    shown = {parameter.name: parameter for parameter in tree.parameters(state)}
    gmsh.onelab.set(json.dumps([parameter.json for parameter in shown.values()]))
    now: dict[str, Any] = {}
    for name in shown:
        numbers = gmsh.onelab.getNumber(name)
        now[name] = numbers[0] if len(numbers) else gmsh.onelab.getString(name)[0]
    assert tree.edits(shown, now) == []
    kind = next(name for name in shown if "roof" in name and name.endswith("boundary"))
    now[kind] = list(Boundary.registry).index("impedance")
    [(parameter, value)] = tree.edits(shown, now)
    assert value == "impedance" and state.with_row(parameter.row, value).kind_of("roof") == "impedance"


def test_the_legend_counts_kinds_and_every_kind_has_its_colour(tmp_path: Path) -> None:
    assert palette.legend_lines(["rigid", "", "vibrating", "rigid"]) == [
        ("rigid", "rigid (2)"),
        ("vibrating", "vibrating (1)"),
        ("", "no boundary kind (1)"),
    ]
    colours = [palette.colour(kind) for kind in Boundary.registry]
    assert len(set(colours)) == len(colours) and palette.colour("") == HAIR not in colours
    width, height = palette.draw_legend(["rigid", "vibrating"], tmp_path / "legend.png")
    assert (tmp_path / "legend.png").stat().st_size > 500 and width > height


# ---------------------------------------------------------------------------------------------------------------------
# opening


def test_a_geometry_is_opened_with_a_job_to_begin_with(gmsh_model: None, tmp_path: Path) -> None:
    (tmp_path / "box.geo").write_text(
        'SetFactory("OpenCASCADE");\nBox(1) = {0, 0, 0, 1, 0.8, 0.6};\nMesh.MeshSizeMax = 0.5;\n'
    )
    opened, state = open_files(tmp_path / "box.geo")
    assert opened.regrouped and len(state.surfaces) == 6 and not state.problem()
    assert state.document.value(("mesh", "file")) == "box.msh" and state.changed
    assert not [f for f in state.findings(opened.mesh) if f.severity == "error"]


def _in_millimetres(path: Path) -> Path:
    import gmsh

    gmsh.option.setString("Geometry.OCCTargetUnit", "MM")
    gmsh.model.occ.addBox(0, 0, 0, 1000, 800, 600)
    gmsh.model.occ.synchronize()
    gmsh.write(str(path))
    gmsh.clear()
    return path


@pytest.mark.parametrize(("file", "unit"), [("box.step", None), ("box.brep", "mm")])
def test_cad_in_millimetres_is_opened_in_metres(gmsh_model: None, tmp_path: Path, file: str, unit: str | None) -> None:
    """STEP states its unit, BREP does not; either comes without groups, and its job says the unit of the .msh saved."""
    opened, state = open_files(_in_millimetres(tmp_path / file), unit=unit)
    assert opened.regrouped and np.allclose(np.ptp(opened.mesh.nodes, axis=0), (1.0, 0.8, 0.6))
    assert state.document.tree["mesh"] == {"file": "box.msh", "unit": "mm"} and len(state.surfaces) == 6


def test_a_unit_that_must_be_stated_is_asked_for_before_meshing(gmsh_model: None, tmp_path: Path) -> None:
    path = _in_millimetres(tmp_path / "box.brep")
    with pytest.raises(CaseError, match=r"is 1000 m long if its own unit is believed.*state the unit"):
        open_files(path)
    (tmp_path / "box.toml").write_text('[mesh]\nfile = "box.brep"\nsize = 0.5\n')
    opened, state = open_files(path, unit="mm")
    assert opened.scale == 1e-3 and state.document.value(("mesh", "unit")) == "mm"


def test_a_wrapped_geometry_is_opened_with_its_air(gmsh_model: None, tmp_path: Path) -> None:
    (tmp_path / "box.geo").write_text('SetFactory("OpenCASCADE");\nBox(1) = {0, 0, 0, 1, 0.8, 0.6};\n')
    wrapped = '[mesh]\nfile = "box.geo"\nsize = 0.5\n[wrap]\ngap = 0.2\nground = 0.0\n'
    (tmp_path / "box.toml").write_text(wrapped)
    opened, state = open_files(tmp_path / "box.toml")
    assert set(opened.entities) == {"outside", "ground"} and set(opened.mesh.tet_groups) == {"outside_air"}
    assert state.document.job.wrap is not None


def test_a_mesh_brings_its_job_and_takes_it_back(gmsh_model: None, tmp_path: Path) -> None:
    import gmsh

    gmsh.model.occ.addBox(0, 0, 0, 1, 0.8, 0.6)
    gmsh.model.occ.synchronize()
    gmsh.model.addPhysicalGroup(2, [1], name="z0")
    gmsh.model.addPhysicalGroup(3, [1], name="air")
    gmsh.model.mesh.generate(3)
    path = tmp_path / "box.msh"
    gmsh.write(str(path))
    for title in ("first", "second"):
        path.write_bytes(job_stored_in(path.read_bytes(), tagged.job().with_(title=title).to_json()))
        gmsh.clear()
        opened, state = open_files(path)
        assert state.document.job.title == title and opened.entities == {"z0": (1,)} and opened.group_of == {1: "z0"}
    with pytest.raises(FormatError, match="there is no file"):
        open_files(tmp_path / "none.msh")


# ---------------------------------------------------------------------------------------------------------------------
# views and scripts


def test_views_show_what_the_result_holds(gmsh_model: None) -> None:
    import gmsh

    result = solved_box.result()
    views = Views(result, scale=0.5)
    tags = [views.levels(120.0), views.cut(120.0), views.phase(120.0), views.panels(120.0, "right_ear")]
    assert list(gmsh.view.getTags()) == tags
    data = {tag: gmsh.view.getListData(tag)[2][0].reshape(-1, 9 + 3 * (PHASES if tag == tags[2] else 1)) for tag in tags}
    corners = data[tags[1]][:, :9].reshape(-1, 3, 3).transpose(0, 2, 1).reshape(-1, 3) * 0.5
    assert np.allclose(corners[:, 1], 0.5)
    p = result.pressure_at(corners[:50], 120.0)[:, 0]
    assert np.allclose(data[tags[1]][:, 9:].reshape(-1)[:50], 10 * np.log10(0.5 * np.abs(p) ** 2 / 2.0 / 4e-10), atol=1e-6)
    steps = data[tags[2]][:, 9:].reshape(-1, PHASES, 3)
    assert np.allclose(steps[:, 0], -steps[:, PHASES // 2])
    assert sum(views.shares(120.0, "right_ear").values()) == pytest.approx(100.0)
    for option, value in (("RangeType", 2), ("SaturateValues", 1), ("CustomMax", views.limits(120.0)[1])):
        assert gmsh.view.option.getNumber(tags[0], option) == value
    assert views.levels(220.0) == tags[0], "another line takes the place of the first"
    views.remove("levels")
    assert len(gmsh.view.getTags()) == 3
    views.remove()
    assert not len(gmsh.view.getTags())


def test_views_on_the_same_surfaces_take_each_others_place(gmsh_model: None) -> None:
    views = Views(solved_box.result())
    choice = results.Choice.of(views.result, views)
    rows = {str(p.row.path[0]): p.row for p in results.result_parameters(views.result, choice)}
    for key, shown, seen in (("cut", 1, ("levels", "cut")), ("phase", 1, ("cut", "phase")), ("phase", 0, ("cut",))):
        choice = results.changed(choice, rows[key], shown, views)
        assert choice.views == seen


def test_planes_that_cannot_be_cut_are_refused(gmsh_model: None) -> None:
    views = Views(solved_box.result())
    with pytest.raises(ResultError, match="misses the fluid"):
        views.cut(120.0, origin=(0.0, 5.0, 0.0))
    with pytest.raises(ResultError, match="a cut needs a normal"):
        plane_grid(np.zeros((1, 3)), (0, 0, 0), (0, 0, 0))


def test_the_branch_of_results_follows_a_person(gmsh_model: None) -> None:
    result = solved_box.result()
    views = Views(result)
    choice = results.Choice.of(result, views)
    rows = {str(p.row.path[0]): p.row for p in results.result_parameters(result, choice)}
    assert choice.low == choice.high - 40 and rows["receiver"].choices == ("left_ear", "right_ear")
    for key, value in (("normal", "z"), ("cut", 1.0), ("receiver", "right_ear"), ("load_case", "idle"), ("frequency", 220.0)):
        choice = results.changed(choice, rows[key], value, views)
    choice = results.show(views, choice)
    assert (choice.views, choice.normal, choice.position, choice.frequency) == (("levels", "cut"), "z", 0.3, 220.0)
    assert len(results.ranking(views, choice)) == 3


def test_a_gmsh_script_of_a_model_that_radiates(gmsh_model: None, tmp_path: Path) -> None:
    """A ball wrapped, solved and shown: the power of a pulsating sphere (Pierce, Acoustics, ch. 4), less for flat faces."""
    import gmsh

    ball = gmsh.model.occ.addSphere(0, 0, 0, 0.25)
    gmsh.model.occ.synchronize()
    gmsh.model.addPhysicalGroup(2, [tag for _, tag in gmsh.model.getBoundary([(3, ball)])], name="ball")
    script.wrap(gap=0.08)
    gmsh.option.setNumber("Mesh.MeshSizeMax", 0.06)
    gmsh.model.mesh.generate(3)
    (tmp_path / "ball.toml").write_text(
        'regions.outside_air.medium = { kind = "fluid", density = 1.205, speed = 343.0 }\n'
        '[surfaces.ball]\nkind = "vibrating"\nvelocity = 0.01\n[surfaces.outside]\nkind = "radiating"\n'
        '[[receivers]]\nname = "near"\nposition = [0.29, 0.0, 0.0]\n'
        "[sweep]\nfrequencies = [200.0]\nfield_frequencies = [200.0]\norder = 2\nerror_bar = false\nmethod = 'direct'\n"
    )

    result = script.solved(tmp_path / "ball.toml")
    tags = script.show(result, 200.0, receiver="near")

    ka = 2 * np.pi * 200.0 / 343.0 * 0.25
    exact = 4 * np.pi * 0.25**2 * 0.01**2 / 2 * 1.205 * 343.0 * ka**2 / (1 + ka**2)
    radiated = result.load_cases[0].absorbed[:, result.power_labels.index("radiated/outside")]
    assert radiated == pytest.approx([exact], rel=0.05) and list(gmsh.view.getTags()) == list(tags.values())


def test_three_lines_in_a_gmsh_script(gmsh_model: None, tmp_path: Path) -> None:
    import gmsh

    with pytest.raises(CaseError, match="the mesh holds no tetrahedra; mesh the volume"):
        script.write(Job().with_sweep(50, 100, 50), tmp_path / "none.h5")
    gmsh.model.occ.addBox(0, 0, 0, 1, 0.8, 0.6)
    gmsh.model.occ.synchronize()
    gmsh.model.addPhysicalGroup(2, [1], name="x0")
    gmsh.model.addPhysicalGroup(2, [2, 3, 4, 5, 6], name="walls")
    gmsh.model.addPhysicalGroup(3, [1], name="air")
    gmsh.option.setNumber("Mesh.MeshSizeMax", 0.5)
    gmsh.model.mesh.generate(3)
    text = TEXT.replace('"x*"', "walls").replace("surfaces.z0", "surfaces.x0").replace("velocity = [\n]", "velocity = 1e-3")
    (tmp_path / "box.toml").write_text(text.replace("[sweep]", "[sweep]\nfield_frequencies = [100.0]"))

    result = script.solved(tmp_path / "box.toml")
    tags = script.show(result, 100.0, receiver="ear")
    gmsh.view.write(tags["levels"], str(tmp_path / "levels.pos"))

    assert list(tags) == ["levels", "cut", "phase", "panels"] and (tmp_path / "levels.pos").stat().st_size > 1000
    case = read_case(script.write(tmp_path / "box.toml", tmp_path / "box.h5"))
    assert case.checksum == result.case.checksum


# ---------------------------------------------------------------------------------------------------------------------
# the child


def test_a_solution_runs_beside_and_can_be_stopped(tmp_path: Path) -> None:
    write_case(solved_box.case(), tmp_path / "case.h5")
    child = Child(tmp_path / "case.h5", tmp_path / "result.h5")
    said: list[str] = []
    end = time.monotonic() + 60
    while child.status is None and time.monotonic() < end:
        said += child.lines()
        time.sleep(0.05)
    said += child.lines()
    child.close()
    assert child.status == 0 and any("lines" in line for line in said)
    assert read_result(tmp_path / "result.h5").case.checksum == solved_box.case().checksum
    stopped = Child(tmp_path / "case.h5", tmp_path / "other.h5")
    stopped.close()
    assert stopped.status not in (None, 0) and not (tmp_path / "other.h5").exists()
