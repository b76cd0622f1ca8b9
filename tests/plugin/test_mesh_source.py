"""Every way into a tagged mesh gives the same mesh; units are stated or refused; scripts run as they are."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

import meshio
import numpy as np
import pytest

from meshes import box, quadratic
from murmesh.plugin import mesh_source
from murmesh.plugin.gmsh_session import step_unit
from murmesh.plugin.mesh_source import (
    JOB_ATTRIBUTE,
    MEAN_EDGE,
    TaggedMesh,
    cell_keys,
    element_size,
    from_gmsh,
    from_meshio,
    read_mesh,
    tagged_mesh,
)
from murmesh.solver.errors import CaseError, FormatError, MeshError
from murmesh.solver.orders import a_priori_error

VTK_EDGES = np.array([[0, 1], [1, 2], [0, 2], [0, 3], [1, 3], [2, 3]])


def _tagged_box(gmsh: Any, scale: float = 1.0, order: int = 1, size: float = 0.5) -> None:
    """A box with `left` (x = 0 and y = 0), `front` (y = 0 again) and an unnamed group on top."""
    gmsh.model.occ.addBox(0, 0, 0, 1.0 * scale, 0.8 * scale, 0.6 * scale)
    gmsh.model.occ.synchronize()
    at = {tuple(np.round(gmsh.model.occ.getCenterOfMass(2, tag), 6)): tag for _, tag in gmsh.model.getEntities(2)}
    left, front = at[0.0, 0.4 * scale, 0.3 * scale], at[0.5 * scale, 0.0, 0.3 * scale]
    gmsh.model.addPhysicalGroup(3, [1], name="air")
    gmsh.model.addPhysicalGroup(2, [left, front], name="left")
    gmsh.model.addPhysicalGroup(2, [front], name="front")
    gmsh.model.addPhysicalGroup(2, [at[0.5 * scale, 0.4 * scale, 0.6 * scale]], tag=77)
    gmsh.model.addPhysicalGroup(1, [1], name="edge")
    gmsh.option.setNumber("Mesh.MeshSizeMax", size * scale)
    gmsh.model.mesh.generate(3)
    gmsh.model.mesh.setOrder(order)


def _area(mesh: TaggedMesh, name: str) -> float:
    a, b, c = (mesh.nodes[mesh.triangles[mesh.triangle_groups[name]][:, i]] for i in range(3))
    return float(np.linalg.norm(np.cross(b - a, c - a), axis=1).sum() / 2)


def _check_box(mesh: TaggedMesh, order: int) -> None:
    assert mesh.tets.shape[1] == (4 if order == 1 else 10)
    assert len(mesh.tet_groups["air"]) == len(mesh.tets)
    assert _area(mesh, "left") == pytest.approx(0.8 * 0.6 + 1.0 * 0.6)
    assert _area(mesh, "front") == pytest.approx(1.0 * 0.6)
    assert set(mesh.triangle_groups) == {"left", "front", "surface_77"}
    assert np.isin(mesh.triangle_groups["front"], mesh.triangle_groups["left"]).all()
    if order == 2:
        middle = mesh.nodes[mesh.tets[:, VTK_EDGES]].mean(axis=2)
        np.testing.assert_allclose(mesh.nodes[mesh.tets[:, 4:]], middle, atol=1e-12)


@pytest.mark.parametrize("order", [1, 2])
def test_current_model(gmsh_model: None, order: int) -> None:
    import gmsh

    _tagged_box(gmsh, order=order)
    mesh = from_gmsh()
    _check_box(mesh, order)
    assert mesh.other_groups == {"edge": 1}


@pytest.mark.parametrize("reader", ["gmsh", "meshio"])
@pytest.mark.parametrize("version", [2.2, 4.1])
@pytest.mark.parametrize("binary", [0, 1])
@pytest.mark.parametrize("order", [1, 2])
def test_msh_of_every_flavour(
    gmsh_model: None, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, version: float, binary: int, order: int, reader: str
) -> None:
    """Version 2.2 writes a triangle in two groups twice; it is read once, in both."""
    import gmsh

    _tagged_box(gmsh, order=order)
    text = '{"title": "umlaut ü, \\"quoted\\""}'
    gmsh.model.setAttribute(JOB_ATTRIBUTE, [text])
    gmsh.option.setNumber("Mesh.MshFileVersion", version)
    gmsh.option.setNumber("Mesh.Binary", binary)
    gmsh.write(str(tmp_path / "box.msh"))
    if reader == "meshio":
        monkeypatch.setattr(mesh_source, "gmsh_missing", lambda: "gmsh is missing")
    mesh = read_mesh(tmp_path / "box.msh")
    _check_box(mesh, order)
    assert mesh.job == text


def test_an_open_session_comes_back_as_it_was(gmsh_model: None, tmp_path: Path) -> None:
    import gmsh

    _tagged_box(gmsh)
    gmsh.write(str(tmp_path / "box.msh"))
    before = gmsh.model.getCurrent(), gmsh.model.list(), gmsh.option.getNumber("Mesh.MeshSizeMax")
    read_mesh(tmp_path / "box.msh", size=0.01)
    assert (gmsh.model.getCurrent(), gmsh.model.list(), gmsh.option.getNumber("Mesh.MeshSizeMax")) == before


def test_no_session_is_said(gmsh_library: None) -> None:
    with pytest.raises(MeshError, match=r"no current model; call gmsh\.initialize"):
        from_gmsh()


def test_groups_without_cells_are_kept(gmsh_model: None) -> None:
    import gmsh

    gmsh.model.occ.addBox(0, 0, 0, 1, 1, 1)
    gmsh.model.occ.synchronize()
    gmsh.model.addPhysicalGroup(3, [1], name="air")
    gmsh.model.addPhysicalGroup(2, [1], name="wall")
    gmsh.model.mesh.generate(2)
    mesh = from_gmsh()
    assert len(mesh.tet_groups["air"]) == 0 and len(mesh.triangle_groups["wall"]) > 0 and len(mesh.tets) == 0


def test_other_cells_are_counted(gmsh_model: None) -> None:
    import gmsh

    gmsh.model.occ.addRectangle(0, 0, 0, 1, 1)
    gmsh.model.occ.extrude([(2, 1)], 0, 0, 1, numElements=[2], recombine=True)
    gmsh.model.occ.synchronize()
    gmsh.option.setNumber("Mesh.MeshSizeMax", 0.6)
    gmsh.model.mesh.generate(3)
    mesh = from_gmsh()
    assert mesh.other_cells["prism"] > 0 and mesh.other_cells["quadrilateral"] > 0 and len(mesh.tets) == 0


def test_order_three_is_another_cell(gmsh_model: None) -> None:
    import gmsh

    _tagged_box(gmsh, order=3)
    assert any("tetrahedron of order 3" in name for name in from_gmsh().other_cells)


# -- geometry and units ------------------------------------------------------------------------------------------------


def _write_cad(gmsh: Any, path: Path, scale: float) -> None:
    gmsh.model.add("cad")
    gmsh.model.occ.addBox(0, 0, 0, 1.5 * scale, 1.2 * scale, 1.0 * scale)
    gmsh.model.occ.synchronize()
    gmsh.write(str(path))
    gmsh.model.remove()


@pytest.mark.parametrize("unit", [None, "mm"])
def test_step_in_millimetres(gmsh_model: None, tmp_path: Path, unit: str | None) -> None:
    import gmsh

    _write_cad(gmsh, tmp_path / "cab.step", 1000.0)
    mesh = read_mesh(tmp_path / "cab.step", size=0.6, unit=unit)
    assert mesh.extent == pytest.approx(1.5)
    assert 20 < len(mesh.tets) < 5000


def test_reading_step_leaves_later_exports_alone(gmsh_model: None, tmp_path: Path) -> None:
    """gmsh keeps a target unit for every later export of the process: millimetres, its default, must stay."""
    import gmsh

    _write_cad(gmsh, tmp_path / "before.step", 1000.0)
    read_mesh(tmp_path / "before.step", size=0.6)
    _write_cad(gmsh, tmp_path / "after.step", 1000.0)
    assert read_mesh(tmp_path / "after.step", size=0.6).extent == pytest.approx(1.5)
    assert gmsh.option.getString("Geometry.OCCTargetUnit") == ""


def test_step_that_states_metres(gmsh_model: None, tmp_path: Path) -> None:
    import gmsh

    _write_cad(gmsh, tmp_path / "cab.step", 1000.0)
    text = (tmp_path / "cab.step").read_text(encoding="latin-1")
    (tmp_path / "cab.step").write_text(text.replace("SI_UNIT(.MILLI.,.METRE.)", "SI_UNIT($,.METRE.)"), encoding="latin-1")
    assert step_unit(tmp_path / "cab.step") == 1.0
    with pytest.raises(CaseError, match=r"1500 m long .* state the unit of its coordinates, e\.g\. unit = \"mm\""):
        read_mesh(tmp_path / "cab.step", size=0.6)
    assert read_mesh(tmp_path / "cab.step", size=0.6, unit="mm").extent == pytest.approx(1.5)


def test_step_too_small_is_refused(gmsh_model: None, tmp_path: Path) -> None:
    import gmsh

    _write_cad(gmsh, tmp_path / "cab.step", 1.0)
    with pytest.raises(CaseError, match=r"0\.0015 m long"):
        read_mesh(tmp_path / "cab.step", size=0.6)
    assert read_mesh(tmp_path / "cab.step", size=0.6, unit="m").extent == pytest.approx(1.5)


def test_brep_in_millimetres_is_refused_until_the_unit_is_stated(gmsh_model: None, tmp_path: Path) -> None:
    import gmsh

    _write_cad(gmsh, tmp_path / "cab.brep", 1000.0)
    with pytest.raises(CaseError, match="1500 m long"):
        read_mesh(tmp_path / "cab.brep", size=0.6)
    assert read_mesh(tmp_path / "cab.brep", size=0.6, unit="mm").extent == pytest.approx(1.5)
    assert read_mesh(tmp_path / "cab.brep", size=600.0, unit="m").extent == pytest.approx(1500.0)


def test_a_mesh_too_long_is_refused_unless_its_unit_is_stated(gmsh_model: None, tmp_path: Path) -> None:
    import gmsh

    _tagged_box(gmsh, scale=1500.0)
    gmsh.write(str(tmp_path / "cab.msh"))
    with pytest.raises(CaseError, match=r"cab\.msh' is 1500 m long"):
        read_mesh(tmp_path / "cab.msh")
    assert read_mesh(tmp_path / "cab.msh", unit="mm").extent == pytest.approx(1.5)


def test_unknown_unit() -> None:
    with pytest.raises(CaseError, match=r"unit 'metre' is not known; .*Known: "):
        read_mesh(__file__, unit="metre")


def test_geo_with_a_curved_wall_gets_curved_elements(gmsh_library: None, tmp_path: Path) -> None:
    path = tmp_path / "pipe.geo"
    path.write_text(
        'SetFactory("OpenCASCADE");\nCylinder(1) = {0,0,0, 0,0,0.4, 0.1};\nPhysical Volume("air") = {1};\n'
        'Physical Surface("wall") = {1};\n'
    )
    curved, straight = read_mesh(path, size=0.1), read_mesh(path, size=0.1, order=1)
    assert curved.tets.shape[1] == 10 and straight.tets.shape[1] == 4
    radius = np.hypot(*curved.nodes[np.unique(curved.triangles[curved.triangle_groups["wall"]]), :2].T)
    np.testing.assert_allclose(radius, 0.1, atol=1e-9)


def test_geometry_without_a_volume(gmsh_library: None, tmp_path: Path) -> None:
    path = tmp_path / "plate.geo"
    path.write_text('SetFactory("OpenCASCADE");\nRectangle(1) = {0,0,0, 1,1};\n')
    with pytest.raises(MeshError, match="holds no volume and no tetrahedra"):
        read_mesh(path)


def test_broken_geometry(gmsh_library: None, tmp_path: Path) -> None:
    path = tmp_path / "broken.geo"
    path.write_text("Box(1) = {nonsense;\n")
    with pytest.raises(FormatError, match=r"gmsh cannot read .*broken\.geo"):
        read_mesh(path)


# -- scripts -----------------------------------------------------------------------------------------------------------

SCRIPT = """
import sys, gmsh
import dimensions
gmsh.initialize()
gmsh.model.add("script")
gmsh.model.occ.addBox(0, 0, 0, dimensions.LENGTH, 0.8, 0.6)
gmsh.model.occ.synchronize()
gmsh.model.addPhysicalGroup(3, [1], name="air")
gmsh.model.addPhysicalGroup(2, [1], name="left")
print("hello", sys.argv[1:])
{more}
if "-nopopup" not in sys.argv:
    gmsh.fltk.run()
gmsh.finalize()
"""


def _script(folder: Path, more: str = "") -> Path:
    (folder / "dimensions.py").write_text("LENGTH = 1.25\n")
    path = folder / "model_of_mine.py"
    path.write_text(SCRIPT.format(more=more))
    return path


@pytest.fixture(autouse=True)
def _forget_dimensions() -> Any:
    yield
    sys.modules.pop("dimensions", None)


@pytest.mark.parametrize("more", ["", "gmsh.model.mesh.generate(3)", "sys.exit(0)"])
def test_script_is_run_and_meshed_if_it_did_not(
    gmsh_library: None, tmp_path: Path, capsys: pytest.CaptureFixture[str], more: str
) -> None:
    argv, path = list(sys.argv), list(sys.path)
    mesh = read_mesh(_script(tmp_path, more), size=0.4)
    assert mesh.extent == pytest.approx(1.25) and len(mesh.tet_groups["air"]) == len(mesh.tets) > 20
    assert capsys.readouterr().out == ""
    assert (sys.argv, sys.path) == (argv, path)
    import gmsh

    assert not gmsh.isInitialized()
    gmsh.initialize(readConfigFiles=False, interruptible=False)  # it is itself again
    assert gmsh.isInitialized()
    gmsh.finalize()


def test_script_that_fails_is_named_with_its_line(gmsh_library: None, tmp_path: Path) -> None:
    with pytest.raises(CaseError, match=r"model_of_mine\.py', line 11 failed: ZeroDivisionError"):
        read_mesh(_script(tmp_path, "1 / 0"))


def test_script_that_ends_badly(gmsh_library: None, tmp_path: Path) -> None:
    with pytest.raises(CaseError, match="ended with status 3; run it by itself"):
        read_mesh(_script(tmp_path, "sys.exit(3)"))


# -- meshio ------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("order", [1, 2])
def test_named_sets_of_a_deck(tmp_path: Path, order: int) -> None:
    test = box(2, 2, 2) if order == 1 else quadratic(box(2, 2, 2))
    width = ("triangle", "tetra") if order == 1 else ("triangle6", "tetra10")
    cells = [(width[1], test.tets), (width[0], test.surfaces["z0"])]
    sets = {"air ": [np.arange(len(test.tets)), []], "floor": [[], np.arange(len(test.surfaces["z0"]))]}
    mesh = from_meshio(meshio.Mesh(test.nodes, cells, cell_sets=sets))
    assert len(mesh.tet_groups["air"]) == len(test.tets)
    np.testing.assert_array_equal(mesh.triangles[mesh.triangle_groups["floor"]], test.surfaces["z0"])
    assert mesh.tets.shape == test.tets.shape


def test_names_padded_with_blanks(tmp_path: Path) -> None:
    test = box(1, 1, 1)
    mesh = meshio.Mesh(
        test.nodes,
        [("tetra", test.tets), ("triangle", test.surfaces["x0"])],
        cell_data={"cell_tags": [np.full(len(test.tets), -1), np.full(len(test.surfaces["x0"]), -2)]},
    )
    mesh.cell_tags = {-1: ["air     "], -2: ["wall    "]}
    meshio.write(tmp_path / "box.med", mesh)
    read = read_mesh(tmp_path / "box.med")
    assert set(read.tet_groups) == {"air"} and set(read.triangle_groups) == {"wall"}


def test_vtk_has_no_names_but_is_read(tmp_path: Path) -> None:
    test = box(2, 1, 1)
    meshio.write(
        tmp_path / "box.vtu", meshio.Mesh(test.nodes, [("tetra", test.tets), ("hexahedron", [[0, 1, 2, 3, 4, 5, 6, 7]])])
    )
    mesh = read_mesh(tmp_path / "box.vtu")
    assert len(mesh.tets) == len(test.tets) and not mesh.tet_groups and mesh.other_cells == {"hexahedron": 1}


@pytest.mark.parametrize("name", ["broken.vtu", "broken.inp", "broken.med", "broken.xyz", "broken.msh"])
def test_what_cannot_be_read(gmsh_library: None, tmp_path: Path, name: str) -> None:
    """meshio ends some errors with SystemExit; here all are FormatErrors."""
    (tmp_path / name).write_text("this is no mesh\n")
    with pytest.raises((FormatError, MeshError), match=name.replace(".", r"\.")):
        read_mesh(tmp_path / name)


def test_missing_file(tmp_path: Path) -> None:
    with pytest.raises(FormatError, match="there is no file"):
        read_mesh(tmp_path / "none.msh")


# -- pieces ------------------------------------------------------------------------------------------------------------


def test_a_cell_that_comes_twice_is_kept_once_in_both_groups() -> None:
    test = box(1, 1, 1)
    twice = test.surfaces["z0"][:, [2, 0, 1]]
    mesh = tagged_mesh(test.nodes, [(test.tets, ("air",))], [(test.surfaces["z0"], ("a",)), (twice, ("b",))])
    assert len(mesh.triangles) == 2
    np.testing.assert_array_equal(mesh.triangle_groups["a"], mesh.triangle_groups["b"])


def test_mixed_orders_are_refused() -> None:
    one, two = box(1, 1, 1), quadratic(box(1, 1, 1))
    with pytest.raises(MeshError, match="mixes tetrahedra of order 1 and 2"):
        tagged_mesh(two.nodes, [(one.tets, ()), (two.tets, ())], [])


def test_keys_differ_where_cells_differ() -> None:
    test = box(4, 4, 4)
    faces = np.unique(np.sort(test.tets[:, [[0, 1, 2], [0, 1, 3], [0, 2, 3], [1, 2, 3]]].reshape(-1, 3), axis=1), axis=0)
    keys = cell_keys(faces, len(test.nodes))
    assert len(np.unique(keys)) == len(faces)
    np.testing.assert_array_equal(keys, cell_keys(faces[:, [1, 2, 0]], len(test.nodes)))


@pytest.mark.parametrize("order", range(1, 9))
def test_element_size_inverts_the_rule(order: int) -> None:
    size = element_size(500.0, 343.0, order, 0.1)
    assert a_priori_error(2 * np.pi * 500 / 343 * size * MEAN_EDGE, order) == pytest.approx(0.1)


def test_element_size_holds_on_a_mesh(gmsh_model: None) -> None:
    import gmsh

    from murmesh.solver.case.medium import GivenFluid, LossFactor
    from murmesh.solver.case.model import Case, Mesh, Region, Sweep
    from murmesh.solver.space import discretise

    _tagged_box(gmsh, size=element_size(800.0, 343.0, 4, 0.1))
    mesh = from_gmsh()
    sweep = Sweep(np.array([800.0]), accuracy=0.1)
    none = np.empty((0, 3), dtype=np.int64)
    held = Mesh(mesh.nodes, mesh.tets, np.zeros(len(mesh.tets), np.int64), none, np.empty(0, np.int64))
    region = Region("air", GivenFluid(1.2, 343.0), LossFactor(0.1))
    orders = discretise(Case(held, (region,), (), sweep)).dofs.orders
    assert 3 <= np.median(orders) <= 4


def test_element_size_of_nonsense() -> None:
    with pytest.raises(CaseError, match="give positive numbers and an order from 1 to 8"):
        element_size(500.0, 343.0, 9)
