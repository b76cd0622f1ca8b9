"""Every finding is found where it should be, says its cure, and stays silent where it should."""

from __future__ import annotations

import json
import re
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from cases import case_of
from meshes import TestMesh, box, cylinder, faces_where, quadratic, shell
from murmesh.plugin import check as check_module
from murmesh.plugin.check import Finding, as_json, check, check_case, render
from murmesh.plugin.findings import shape
from murmesh.plugin.job import Job, Rule
from murmesh.plugin.mesh_source import TaggedMesh, tagged_mesh
from murmesh.plugin.model import build_case
from murmesh.solver.case.boundary import (
    Characteristic,
    Impedance,
    Port,
    Pressure,
    Radiating,
    Rigid,
    Sheet,
    Vibrating,
    VibratingTreated,
)
from murmesh.solver.case.catalogue import Treatment
from murmesh.solver.case.load import CrossSpectrum, Incoherent, LoadCase, SurfaceVelocity
from murmesh.solver.case.medium import Air, GivenFluid, LossFactor, NoDamping, PorousMedium, ReverberationTime, WallAbsorption
from murmesh.solver.case.model import Region
from murmesh.solver.case.motion import Autospectrum, Scan, Uniform
from murmesh.solver.case.porous import Miki
from murmesh.solver.case.spectrum import Table
from murmesh.solver.case.wall import Absorption, Given, Layers, PerforatedPlate, PorousLayer, Resonator
from murmesh.solver.transmission import port_shape
from tagged import BOX, job, tagged


def found(code: str, made: Job, mesh: TaggedMesh | None = None) -> list[Finding]:
    """Findings of one code."""
    return [finding for finding in check(made, mesh or tagged()) if finding.code == code]


def only(code: str, made: Job, mesh: TaggedMesh | None = None) -> Finding:
    """The one finding of that code; it has a cure unless it is a note."""
    [finding] = found(code, made, mesh)
    assert finding.cure or finding.severity == "note"
    return finding


def says(finding: Finding, severity: str, subject: str, words: str) -> None:
    assert (finding.severity, finding.subject) == (severity, subject)
    assert re.search(words, f"{finding.message} -> {finding.cure}"), finding


def bare(mesh_damping: Any = None) -> Job:
    return (
        Job(default_boundary="rigid").region("air", Air(), mesh_damping or LossFactor(0.02)).with_sweep(50, 100, 50, order=4)
    )


# -- a sound job, and how findings are shown ---------------------------------------------------------------------------


def test_a_sound_job_has_one_note() -> None:
    [finding] = check(job(), tagged())
    says(finding, "note", "air", r"elements per wavelength at 200 Hz, order 4: a-priori error \d.* dB")


def test_render_is_a_table_with_errors_first() -> None:
    text = render(check(job().surface("lost", Rigid()).receiver("far", (9, 9, 9)), tagged(regions={})))
    lines = text.splitlines()
    assert re.match(r"ERROR +group_lost +lost$", lines[0])
    assert any(line.startswith("    -> ") for line in lines) and max(map(len, lines)) <= 118
    assert lines[-1] == "1 error, 0 warnings, 1 note"
    assert render(()) == ""


def test_json_holds_every_field() -> None:
    held = json.loads(as_json(check(job(), tagged())))
    assert [set(item) for item in held] == [{"code", "severity", "subject", "message", "cure"}]
    assert held[0]["code"] == "elements_per_wavelength"


def test_every_code_is_tested_here() -> None:
    folder = Path(check_module.__file__).parent
    files = [folder / "check.py", folder / "resolve.py", *(folder / "findings").glob("*.py")]
    calls = r"(?:error|warning|note|_refused)\)?\(\s*(?:code\b[^,]*|f?\"(\w+)\")"
    codes = {code for file in files for code in re.findall(calls, file.read_text()) if code}
    codes |= set(re.findall(r"code = \"(\w+)\"", "".join(file.read_text() for file in files)))
    here = Path(__file__).read_text(encoding="utf-8")
    assert len(codes) > 30
    assert not [code for code in codes if f'"{code}"' not in here]


# -- names -------------------------------------------------------------------------------------------------------------


def test_lost_group() -> None:
    says(
        only("group_lost", job().surface("z2", Rigid())),
        "error",
        "z2",
        r"no such group of surfaces -> boolean operations drop",
    )
    says(only("group_lost", job().region("water", Air())), "error", "water", r"no such group of volumes .*Known: air")


def test_groups_named_nowhere() -> None:
    finding = only("group_named_nowhere", bare().surface("x*", Rigid()))
    says(finding, "warning", "4 groups", r"4 surface groups .*'y0', 'y1', 'z0', 'z1' -> describe them under \[surfaces\]")
    mesh = tagged(regions={"air": np.arange(len(BOX.tets)), "spare": np.arange(3)})
    says(only("group_named_nowhere", job(), mesh), "warning", "spare", r"1 region group .*'spare'")
    assert not found("group_named_nowhere", bare().surface("roof", Rigid(), where=Rule(of="*")))


def test_surface_without_kind() -> None:
    made = bare().with_(default_boundary="").surface("?0", Rigid())
    finding = only("surface_without_kind", made)
    says(
        finding,
        "error",
        "near (0.733, 0.533, 0.433) m",
        r"32 outer triangles, 2\.16 m2 \(50% .* -> give them a kind \(a group",
    )


def test_default_boundary_is_said() -> None:
    says(only("default_boundary", bare()), "note", "unnamed_walls", r"64 outer triangles.*100%.*rigid surface 'unnamed_walls'")


def test_triangles_in_two_groups() -> None:
    groups = [(held, (name,)) for name, held in BOX.surfaces.items()] + [(BOX.surfaces["z0"][:4], ("patch",))]
    mesh = tagged_mesh(BOX.nodes, [(BOX.tets, ("air",))], groups)
    first = bare().surface("patch", Rigid()).surface("z0", Rigid())
    says(only("triangles_in_two_groups", first, mesh), "warning", "z0", r"4 triangles.*counted once, for 'patch' -> .*first")
    last = bare().surface("z0", Rigid()).surface("patch", Rigid())
    says(only("triangles_in_two_groups", last, mesh), "error", "patch", r"'patch' keeps none")


def test_tetrahedra_in_two_groups() -> None:
    mesh = tagged(regions={"air": np.arange(len(BOX.tets)), "part": np.arange(3)})
    made = Job(default_boundary="rigid").region("part", Air()).region("air", Air()).with_sweep(50, 60, 5)
    says(only("tetrahedra_in_two_groups", made, mesh), "warning", "air", r"3 tetrahedra are in 'part' and in 'air'")


def test_a_rule_that_carves() -> None:
    made = job().surface("patch", Rigid(), where=Rule(inside=((0, 0, 0), (0.4, 0.8, 0)), of="z0"))
    says(only("carved_by_rule", made), "note", "z0", r"4 triangles are in 'patch' and in 'z0'")


def test_a_rule_that_selects_nothing() -> None:
    made = bare().surface("s", Rigid(), where=Rule(inside=((5, 5, 5), (6, 6, 6))))
    says(only("rule_selects_nothing", made), "error", "s", r"the rule of 's' selects no triangle -> check its box \(metres\)")


def test_two_globs() -> None:
    says(only("two_globs", bare().surface("x*", Rigid()).surface("*0", Rigid())), "error", "x0", r"'x\*' and '\*0' -> write")


def test_wrong_dimension() -> None:
    mesh = tagged(other_groups={"edge": 1, "corner": 0})
    says(
        only("wrong_dimension", job().surface("edge", Rigid()), mesh),
        "error",
        "edge",
        r"group of curves -> make it a group of surf",
    )
    says(only("wrong_dimension", job().surface("air", Rigid())), "error", "air", r"as a surface, but .* a group of volumes")
    says(only("wrong_dimension", job().region("z0", Air())), "error", "z0", r"as a region, but .* a group of surfaces")


def test_not_meshed() -> None:
    empty = (np.empty((0, 4), np.int64), ("void",)), (np.empty((0, 3), np.int64), ("hole",))
    groups = [(held, (name,)) for name, held in BOX.surfaces.items()]
    mesh = tagged_mesh(BOX.nodes, [(BOX.tets, ("air",)), empty[0]], [*groups, empty[1]])
    says(
        only("region_not_meshed", job().region("void", Air()), mesh), "error", "void", r"holds no tetrahedra -> mesh it \(dim"
    )
    says(only("surface_not_meshed", job().surface("hole", Rigid()), mesh), "error", "hole", r"holds no triangles -> mesh it")


def test_no_tetrahedra() -> None:
    mesh = tagged_mesh(BOX.nodes, [], [(BOX.surfaces["x0"], ("x0",))])
    says(only("no_tetrahedra", job(), mesh), "error", "a mesh", r"no tetrahedra -> mesh the volume")


def test_one_region_without_a_group() -> None:
    says(only("region_without_group", job(), tagged(regions={})), "note", "air", r"all 72 tetrahedra are the region 'air'")


def test_tetrahedra_without_region() -> None:
    mesh = tagged(regions={"air": np.arange(50), "rest": np.arange(50, 72)})
    says(only("tetrahedra_without_region", job(), mesh), "error", "a mesh", r"22 of 72 tetrahedra belong to no region")


def test_triangle_on_no_tetrahedron() -> None:
    nodes = np.vstack([BOX.nodes, np.array([[0.0, 0, 2], [1, 0, 2], [0, 1, 2]])])
    triangles = [(BOX.surfaces["x0"], ("x0",)), (np.array([[36, 37, 38]]), ("flying",))]
    mesh = tagged_mesh(nodes, [(BOX.tets, ("air",))], triangles)
    made = bare().surface("x0", Rigid()).surface("flying", Rigid())
    says(only("triangle_on_no_tetrahedron", made, mesh), "error", "flying", r"1 of its 1 triangles .* -> .* fragment them")


def test_a_fragment_that_was_forgotten(gmsh_model: None) -> None:
    """Two touching boxes meshed without a common face: surfaces of one lie on no tetrahedron of the other."""
    import gmsh

    from murmesh.plugin.mesh_source import from_gmsh

    gmsh.model.occ.addBox(0, 0, 0, 1, 1, 1)
    gmsh.model.occ.addBox(1, 0, 0, 1, 1, 1)
    gmsh.model.occ.synchronize()
    gmsh.model.addPhysicalGroup(3, [1, 2], name="air")
    gmsh.model.addPhysicalGroup(2, [1], name="left")
    gmsh.option.setNumber("Mesh.MeshSizeMax", 0.6)
    gmsh.model.mesh.generate(3)
    made = bare().surface("left", Vibrating(), velocity=1e-3).receiver("ear", (1.5, 0.5, 0.5))
    codes = {finding.code: finding for finding in check(made, from_gmsh())}
    says(codes["silent_receivers"], "warning", "(1.5, 0.5, 0.5) m", r"they hear nothing -> .*fragment the volumes")


# -- the mesh itself ---------------------------------------------------------------------------------------------------


def test_other_cells() -> None:
    mesh = tagged(other_cells={"prism": 7, "hexahedron": 2})
    says(only("non_tetrahedral_cells", job(), mesh), "error", "a mesh", r"not used: 2 hexahedron, 7 prism -> mesh with tetra")


@pytest.mark.parametrize(("factor", "severity"), [(1000.0, "error"), (100.0, "warning"), (0.01, "warning")])
def test_size(factor: float, severity: str) -> None:
    finding = only("implausible_size", bare(), tagged().scaled(factor))
    says(finding, severity, "mesh", rf"{1.2 * factor:.4g} m long; expected 0\.05 \.\. 100 m -> state the unit")


def test_flat_and_poor_elements() -> None:
    nodes = BOX.nodes.copy()
    nodes[:, 2] *= 1e-4
    flat = replace(BOX, nodes=nodes)
    says(
        only("flat_elements", bare(), tagged(flat)),
        "error",
        "mesh",
        r"72 of 72 tetrahedra are flat \(quality below 0\.01; the",
    )
    nodes = BOX.nodes.copy()
    nodes[:, 2] *= 0.03
    finding = only("poor_elements", bare(), tagged(replace(BOX, nodes=nodes)))
    says(finding, "warning", "mesh", r"tetrahedra are poor \(quality below 0\.1; the worst, 0\.0\d+, at")


def test_quality_of_known_shapes() -> None:
    regular = np.array([[1.0, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]])
    flat = regular * [1, 1, 0]
    corner = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]])
    tets = np.arange(12).reshape(3, 4)
    q = shape.quality(np.vstack([regular, flat, corner]), tets)
    np.testing.assert_allclose(q, [1, 0, 12 * 0.5 ** (2 / 3) / 9], atol=1e-7)


def test_inverted_elements() -> None:
    mesh = quadratic(BOX)
    assert len(shape.inverted(mesh.nodes, mesh.tets)) == 0
    assert len(shape.inverted(mesh.nodes, mesh.tets[:, [1, 0, 2, 3, 4, 6, 5, 8, 7, 9]])) == 0  # a mirrored one is not inverted
    curved = cylinder(2, 2)
    assert len(shape.inverted(curved.nodes, curved.tets)) == 0
    nodes = mesh.nodes.copy()
    nodes[mesh.tets[10, 4]] = nodes[mesh.tets[10, 2]]
    says(
        only("inverted_elements", bare(), tagged(replace(mesh, nodes=nodes))),
        "error",
        "mesh",
        r"curved tetrahedra are inverted",
    )


def test_overlapping_volumes() -> None:
    nodes = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1], [0, 0, -1], [0.2, 0.2, 0.9]])
    mesh = tagged_mesh(nodes, [(np.array([[0, 1, 2, 3], [0, 1, 2, 4], [0, 1, 2, 5]]), ("air",))], [])
    says(only("overlapping_volumes", bare(), mesh), "error", "mesh", r"1 faces belong to more than two tetrahedra")


def two_boxes() -> TestMesh:
    """Two boxes that do not touch; surfaces of the second have the prefix `far_`."""
    near, far = box(2, 2, 2), box(2, 2, 2, origin=(3.0, 0, 0))
    shift = len(near.nodes)
    surfaces = {**near.surfaces, **{f"far_{name}": held + shift for name, held in far.surfaces.items()}}
    return TestMesh(np.vstack([near.nodes, far.nodes]), np.vstack([near.tets, far.tets + shift]), surfaces)


def test_parts_that_do_not_touch() -> None:
    made = bare().surface("x0", Vibrating(), velocity=1e-3).receiver("ear", (0.5, 0.5, 0.5))
    finding = only("unused_fluid", made, tagged(two_boxes()))
    says(finding, "warning", "(3.5, 0.5, 0.5) m", r"1 m3 about .* has no load and no receiver -> if it should be joined")
    heard = made.receiver("far", (3.3, 0.4, 0.4))
    says(only("silent_receivers", heard, tagged(two_boxes())), "warning", "(3.5, 0.5, 0.5) m", r"they hear nothing")
    loaded = made.source("shaker", (3.3, 0.4, 0.4), 1e-3)
    says(only("unheard_fluid", loaded, tagged(two_boxes())), "note", "(3.5, 0.5, 0.5) m", r"has a load, but no receiver")
    both = heard.surface("far_x0", Vibrating(), velocity=1e-3)
    assert not {f.code for f in check(both, tagged(two_boxes()))} & {"unused_fluid", "silent_receivers", "unheard_fluid"}


# -- surfaces and where they lie ---------------------------------------------------------------------------------------


def with_wall(boundary: Any) -> tuple[Job, TaggedMesh]:
    """The box with an inner surface at x = 0.4."""
    wall = faces_where(BOX, lambda x: np.abs(x[..., 0] - 0.4) < 1e-9)
    return job().surface("wall", boundary), tagged(replace(BOX, surfaces={**BOX.surfaces, "wall": wall}))


def test_inner_surface_without_sheet() -> None:
    finding = only("inner_surface_without_sheet", *with_wall(Rigid()))
    says(finding, "error", "wall", r"8 of its triangles lie inside the fluid, but 'rigid' .* -> make it a sheet")
    assert not found("inner_surface_without_sheet", *with_wall(Sheet()))


def test_a_sheet_parts_the_fluid_unless_air_passes() -> None:
    closed, mesh = with_wall(Sheet())
    says(only("unheard_fluid", closed, mesh), "note", "(0.2, 0.4, 0.3) m", r"has a load, but no receiver")
    left = Rule(inside=((0, 0, 0), (0.4, 1, 0)), of="z0")
    sided = closed.with_(loads=closed.loads.with_(loads=())).surface("patch", Vibrating(), velocity=1e-3, where=left)
    says(only("silent_receivers", sided, mesh), "warning", "(0.8, 0.4, 0.3) m", r"has receivers, but no load")
    leaky = with_wall(Sheet(Rigid(), Rigid(), PerforatedPlate.example()))
    assert not found("unheard_fluid", *leaky) and not found("silent_receivers", *leaky)


def test_a_sheet_on_the_outside() -> None:
    says(only("sheet_on_the_outside", job(x0=Sheet())), "error", "x0", r"8 of its triangles have fluid on one side only")


def test_case_from_elsewhere_with_gaps() -> None:
    case = build_case(job(), tagged())
    mesh = case.mesh.with_(triangle_surface=np.where(case.mesh.triangle_surface == 0, -1, case.mesh.triangle_surface))
    codes = {finding.code: finding for finding in check_case(case.with_(mesh=mesh))}
    says(codes["surface_without_triangles"], "warning", "x0", r"the surface has no triangles")
    says(codes["surface_without_kind"], "warning", "mesh", r"8 outer triangles belong to no surface")
    twice = case.mesh.with_(
        triangles=np.vstack([case.mesh.triangles, case.mesh.triangles[:3, [1, 2, 0]]]),
        triangle_surface=np.append(case.mesh.triangle_surface, [1, 1, 1]),
    )
    [listed] = [f for f in check_case(case.with_(mesh=twice)) if f.code == "triangle_listed_twice"]
    says(listed, "error", "mesh", r"3 triangles are listed more than once.* -> list every triangle once")
    wrong = case.mesh.with_(triangles=np.vstack([[[0, 1, 35]], case.mesh.triangles[1:]]))
    loose = [f for f in check_case(case.with_(mesh=wrong)) if f.code == "triangle_on_no_tetrahedron"]
    says(loose[0], "error", "x0", r"1 of its 8 triangles are a face of no tetrahedron")
    empty = case.with_(regions=(*case.regions, Region("void", Air())))
    assert "region_not_meshed" in {finding.code for finding in check_case(empty)}


def test_receivers_and_sources_outside() -> None:
    finding = only("receiver_outside", job().receiver("far", (1.3, 0.4, 0.3)))
    says(
        finding, "error", "far", r"lies outside every region at \(1\.3, 0\.4, 0\.3\) m; the nearest .* \(1\.2, 0\.4, 0\.3\) m"
    )
    says(
        only("receiver_outside", job().receiver("wide", (0.02, 0.4, 0.3), 0.1)), "error", "wide", r"averaging sphere of 0\.1 m"
    )
    finding = only("source_outside", job().source("pump", (0.5, 0.4, 0.7), 1e-3))
    says(finding, "error", "pump", r"outside every region .* nearest point of the fluid is \(0\.5, 0\.4, 0\.6\) m")


# -- acoustics ---------------------------------------------------------------------------------------------------------


def test_elements_per_wavelength() -> None:
    made = job().with_sweep(50, 2000, 50, order=2)
    finding = only("elements_per_wavelength", made)
    says(
        finding,
        "warning",
        "air",
        r"0\.\d+ elements per wavelength at 2000 Hz, order 2: a-priori error .*wanted 0\.1 dB -> use ele",
    )
    assert only("elements_per_wavelength", job().with_sweep(50, 200, 50)).severity == "note"  # the order is chosen to fit


def test_nothing_absorbs() -> None:
    silent = job().with_(regions=(Job().region("air", Air()).regions))
    says(
        only("no_damping", silent),
        "warning",
        "whole model",
        r"NOTHING IN THIS MODEL ABSORBS SOUND.*-> state the losses as they",
    )
    for damping in (LossFactor(0.01), WallAbsorption(0.02), ReverberationTime(0.3)):
        assert not found("no_damping", job().with_(regions=Job().region("air", Air(), damping).regions))


@pytest.mark.parametrize("boundary", [Impedance(Absorption(0.2)), Characteristic(), Port()])
def test_hard_walls_without_damping(boundary: Any) -> None:
    made = job(x0=boundary).with_(regions=Job().region("air", Air(), NoDamping()).regions)
    assert not found("no_damping", made)
    says(only("hard_walls_without_damping", made), "warning", "air", r"hard walls without any stated damping")


def test_an_active_or_reactive_wall_does_not_count_as_a_loss() -> None:
    made = job(x0=Impedance(Given(-5j)), x1=Pressure()).with_(regions=Job().region("air", Air()).regions)
    assert found("no_damping", made)


def test_no_load_and_no_velocity() -> None:
    made = bare().surface("z0", Vibrating())
    says(only("no_load", made), "warning", "whole model", r"nothing drives the air -> give a surface a velocity")
    made = made.surface("z1", Vibrating(), velocity=1e-3)
    says(only("vibrating_without_load", made), "warning", "z0", r"kind 'vibrating', but no load case gives it a velocity")
    made = made.load_case(LoadCase("other", (SurfaceVelocity("z0", Uniform(1e-3)),)))
    assert not found("vibrating_without_load", made)
    closed, mesh = with_wall(Sheet())
    assert not found("vibrating_without_load", closed, mesh)


def test_autospectra_combined_coherently() -> None:
    made = bare().surface("z0", Vibrating(), velocity=Autospectrum(1e-6, "psd"))
    says(
        only("coherent_autospectra", made),
        "error",
        "loads",
        r"autospectrum without phase.* -> use the combination 'incoherent'",
    )
    assert not found("coherent_autospectra", made.with_loads(combination=Incoherent()))


def test_loads_and_cases_that_are_refused() -> None:
    twice = job().load(SurfaceVelocity("z0", Uniform(1e-3)))
    says(only("loads_refused", twice), "error", "loads", r"'z0' is loaded twice -> merge the two loads")
    rigid = bare().surface("z0", Rigid(), velocity=1e-3)
    says(only("case_refused", rigid), "error", "job", r"kind 'rigid' cannot carry a surface_velocity -> make it vibrating")


def test_tables_that_do_not_cover_the_sweep() -> None:
    table = Table(np.array([60.0, 300.0]), np.array([1e-3 + 0j, 1e-3]))
    made = bare().surface("z0", Vibrating(), velocity=table)
    words = r"table holds 60 \.\. 300 Hz, but 50 Hz is asked.* -> .*narrow the sweep"
    says(only("table_out_of_range", made), "error", "default/z0", words)
    held = Table(table.frequencies, table.values * 100, extrapolate=True)
    assert not found("table_out_of_range", bare().surface("z0", Vibrating(), velocity=held))
    says(only("table_out_of_range", job(x0=Impedance(Given(table)))), "error", "x0", words)
    says(only("table_out_of_range", bare(ReverberationTime(table))), "error", "air", words)
    made = job().treatment(Treatment("mat", 1.0, 1.0, velocity_cut=table))
    says(only("table_out_of_range", made), "error", "mat", words)
    says(only("table_out_of_range", job().source("s", (0.5, 0.3, 0.3), table)), "error", "default/s", words)
    says(only("table_out_of_range", bare().surface("x0", Pressure(), pressure=table)), "error", "default/x0", words)


def test_laws_that_fail() -> None:
    made = job(x0=VibratingTreated(Absorption(0.2), "bonded"))
    says(only("law_fails", made), "error", "x0", r"frame form 'bonded' needs a stack of layers.* -> use 'face'|describe")
    made = job(x0=Impedance(Given(0)))
    says(only("law_fails", made), "error", "x0", r"impedance of zero .*is a pressure-release surface -> use the boundary kind")
    made = job().with_loads(combination=CrossSpectrum.example())
    says(only("law_fails", made), "error", "default", r"matrix is for 2 loads, the load case has 1")


def test_walls_that_create_sound() -> None:
    table = Table(np.array([50.0, 100.0, 150.0, 200.0]), np.array([1.0, 1.0, -0.5 + 1j, 1.0]))
    words = r"Re Z < 0 at 1 of 4 lines, first at 150 Hz \(Z = .* Pa\.s/m\).* -> check the sign"
    says(only("active_wall", job(x0=Impedance(Given(table)))), "error", "x0", words)
    says(only("active_wall", job().treatment(Treatment("foam", 1, 1, wall=Given(table)))), "error", "foam", words)
    closed, mesh = with_wall(Sheet(Impedance(Given(1.0)), Impedance(Given(table))))
    says(only("active_wall", closed, mesh), "error", "wall (back)", words)


def test_measured_walls_of_the_other_time_sign() -> None:
    """A spring that is positive and falls is doubtful; a spring, a mass, a number and a law are not."""
    f = np.array([50.0, 100.0, 150.0, 200.0])
    spring, mass = Table(f, 400 - 4e5j / f), Table(f, 400 + 4j * f)
    words = r"Im Z is 8e\+03 Pa\.s/m at 50 Hz and falls to 4e\+03 at 100 Hz; .* -> if .*, say time_sign = "
    wrong = Given(spring, "Pa.s/m", time_sign="-")
    says(only("time_sign_doubtful", job(x0=Impedance(wrong))), "warning", "x0", rf"{words}'\+'")
    conjugated = Given(Table(f, spring.values.conj()), "Pa.s/m")
    says(
        only("time_sign_doubtful", job().treatment(Treatment("foam", 1, 1, wall=conjugated))), "warning", "foam", f"{words}'-'"
    )
    fine = (Given(spring, "Pa.s/m"), Given(mass, "Pa.s/m"), Given(2 + 1j), Resonator.example())
    assert not [finding for wall in fine for finding in found("time_sign_doubtful", job(x0=Impedance(wall)))]


class Growing(GivenFluid):
    """A medium whose waves grow; no kind of murmesh."""

    def c(self, f: Any) -> Any:
        return np.full(len(f), 340.0 - 5j)


def test_a_medium_that_creates_sound() -> None:
    case = build_case(job(), tagged())
    case = case.with_(regions=(Region("air", Growing(1.2, 340.0), LossFactor(0.02)),))
    [finding] = [finding for finding in check_case(case) if finding.code == "active_medium"]
    says(finding, "error", "air", r"waves grow in the medium, first at 50 Hz \(Im c = -5 m/s\)")


def test_laws_outside_their_published_range() -> None:
    foam = Layers((PorousLayer(Miki(50000.0), 0.05),))
    words = r"Miki holds for 0\.01 < f/sigma < 1 .*J\. Acoust\. Soc\. Jpn"
    says(only("law_out_of_range", job(x0=Impedance(foam))), "warning", "x0", words)
    says(only("law_out_of_range", job().treatment(Treatment("foam", 1, 1, wall=foam))), "warning", "foam", words)
    porous = bare().with_(regions=Job().region("air", PorousMedium(Miki(50000.0))).regions)
    says(only("law_out_of_range", porous), "warning", "air", words)
    assert not found("law_out_of_range", job(x0=Impedance(Layers((PorousLayer(Miki(4000.0), 0.05),)))))


def test_port_above_cut_on() -> None:
    made = job(x0=Port()).with_sweep(50, 300, 50, order=4)
    says(
        only("port_above_cut_on", made),
        "warning",
        "x0",
        r"ends at 300 Hz, above .* at 21[45](\.\d)? Hz \(0\.5 c / 0\.8 m, by its long",
    )
    assert not found("port_above_cut_on", made.with_sweep(50, 200, 50, order=4))


def test_round_port_has_its_own_cut_on() -> None:
    pipe = cylinder(3, 3, radius=0.35)
    made = bare().surface("top", Port()).with_sweep(50, 290, 60, order=4)
    says(only("port_above_cut_on", made, tagged(pipe)), "warning", "top", r"at 28\d(\.\d)? Hz \(0\.586 c / 0\.7 m, round\)")
    assert not found("port_above_cut_on", made.with_sweep(50, 280, 60, order=4), tagged(pipe))


def test_port_shapes() -> None:
    turn = np.array([[np.cos(0.4), -np.sin(0.4), 0], [np.sin(0.4), np.cos(0.4), 0], [0, 0, 1]])
    corners = np.array([[0.0, 0, 0], [2, 0, 0], [2, 1, 0], [0, 1, 0]])
    words, factor, size = port_shape(corners @ turn, 2.0)
    assert (words, factor) == ("by its longer side", 0.5) and size == pytest.approx(2.0, rel=1e-2)
    angle = np.linspace(0, 2 * np.pi, 40, endpoint=False)
    circle = np.stack([np.zeros(40), np.cos(angle), np.sin(angle)], axis=1)
    words, factor, size = port_shape(circle, np.pi)
    assert words == "round" and factor == pytest.approx(0.586, abs=1e-3) and size == pytest.approx(2.0, rel=1e-2)


def test_port_that_is_not_plane() -> None:
    says(
        only("port_not_plane", bare().surface("side", Port()), tagged(cylinder(2, 2))), "warning", "side", r"port is not plane"
    )
    assert not found("port_not_plane", bare().surface("top", Port()), tagged(cylinder(2, 2)))


def test_scan_that_leaves_area_uncovered() -> None:
    x, y = np.meshgrid(np.linspace(0.05, 1.15, 12), np.linspace(0.05, 0.75, 8))
    points = np.stack([x.ravel(), y.ravel(), np.zeros(x.size)], axis=1)

    def scanned(rows: Any) -> Job:
        held = points[rows]
        return bare().surface(
            "z0", Vibrating(), velocity=Scan(held, np.array([50.0, 100.0]), np.ones((2, len(held)), complex))
        )

    finding = only("scan_uncovered", scanned(points[:, 0] < 0.6))
    says(finding, "warning", "default/z0", r"0\.\d+ m2 \([3-6]\d% of the surface\).* -> check the coordinates and their unit")
    assert not found("scan_uncovered", scanned(points[:, 0] < 9))


def test_check_changes_nothing() -> None:
    mesh, made = tagged(), job()
    text = made.to_json()
    check(made, mesh)
    assert made.to_json() == text


def _errors_of_a_shell(kind: Radiating, receiver: tuple[float, float, float]) -> list[tuple[str, str]]:
    mesh = shell(2, (0.25, 0.3))
    load = SurfaceVelocity("inner", Uniform(0.01 + 0j))
    case = case_of(mesh, {"inner": Vibrating(), "outer": kind}, [load], [200.0], {"ear": receiver}, order=3)
    return [(found.code, found.message) for found in check_case(case) if found.severity == "error"]


def test_a_sound_case_that_radiates_has_no_error() -> None:
    assert not _errors_of_a_shell(Radiating(), (0.0, 0.0, 0.27))
    assert not _errors_of_a_shell(Radiating(), (0.0, 2.0, 0.0))


def test_a_receiver_in_the_body_is_an_error() -> None:
    [(code, message)] = _errors_of_a_shell(Radiating(), (0.0, 0.1, 0.0))
    assert code == "receiver_outside"
    assert "'ear' lies outside every region" in message


def test_a_centre_from_which_not_all_is_seen_is_an_error() -> None:
    [(code, message)] = _errors_of_a_shell(Radiating((0.0, 0.0, 1.0)), (0.0, 2.0, 0.0))
    assert code == "radiating_surface"
    assert "surfaces/outer: " in message
    assert "not star-shaped about (0, 0, 1) m" in message
