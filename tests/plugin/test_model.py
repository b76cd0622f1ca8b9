"""Names, globs and rules on meshes: every triangle gets its surface once, and a job travels inside a model."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from meshes import box, quadratic
from murmesh.plugin.job import Job, Rule
from murmesh.plugin.load import load_case_file, load_job
from murmesh.plugin.mesh_source import from_gmsh, tagged_mesh
from murmesh.plugin.model import build_case, case_from_gmsh, store_job, stored_job
from murmesh.plugin.resolve import UNNAMED, resolve
from murmesh.plugin.skin import Skin
from murmesh.solver.case.boundary import Impedance, Port, Pressure, Rigid, Vibrating
from murmesh.solver.case.load import IncomingWave, LoadCase, SurfacePressure, SurfaceVelocity
from murmesh.solver.case.medium import Air, GivenFluid, LossFactor
from murmesh.solver.case.model import Case
from murmesh.solver.case.motion import Uniform
from murmesh.solver.case.wall import Absorption
from murmesh.solver.errors import CaseError, MeshError
from tagged import BOX, job, tagged


def count(case: Case, name: str) -> int:
    """Triangles of a surface."""
    index = [surface.name for surface in case.surfaces].index(name)
    return int(np.sum(case.mesh.triangle_surface == index))


def area(case: Case, name: str) -> float:
    index = [surface.name for surface in case.surfaces].index(name)
    rows = case.mesh.triangles[case.mesh.triangle_surface == index]
    return float(Skin(case.mesh.nodes, case.mesh.tets).areas(rows).sum())


def bare(**walls: Any) -> Job:
    """A job with a region and a sweep only."""
    return Job(**walls).region("air", Air(), LossFactor(0.02)).with_sweep(50, 100, 50, order=2)


# -- names -------------------------------------------------------------------------------------------------------------


def test_every_name_is_found() -> None:
    case = build_case(job(), tagged())
    assert [surface.name for surface in case.surfaces] == ["x0", "x1", "y0", "y1", "z1", "z0"]
    assert {name: count(case, name) for name in ("x0", "y0", "z0")} == {
        name: len(BOX.surfaces[name]) for name in ("x0", "y0", "z0")
    }
    assert case.panels == ("z0",) and case.title == "box"
    assert case.load_case().name == "default"


@pytest.mark.parametrize("order", [1, 2])
def test_order_is_kept_and_unused_nodes_are_dropped(order: int) -> None:
    mesh = BOX if order == 1 else quadratic(BOX)
    made = tagged(mesh)
    stray = tagged_mesh(
        np.vstack([[[9.0, 9, 9]], mesh.nodes]), [(mesh.tets + 1, ("air",))],
        [(held + 1, (name,)) for name, held in mesh.surfaces.items()],
    )  # fmt: skip
    case = build_case(job(), stray)
    assert case.mesh.tets.shape == mesh.tets.shape and case.mesh.triangles.shape[1] == (3 if order == 1 else 6)
    assert len(case.mesh.nodes) == len(mesh.nodes)
    assert case.checksum == build_case(job(), made).checksum


def test_an_exact_name_wins_over_a_glob() -> None:
    case = build_case(
        bare().surface("?0", Vibrating()).surface("?1", Rigid()).surface("x0", Impedance(Absorption(0.5))), tagged()
    )
    kinds = {surface.name: surface.boundary.kind_name for surface in case.surfaces}
    assert kinds == {"x0": "impedance", "y0": "vibrating", "z0": "vibrating", "x1": "rigid", "y1": "rigid", "z1": "rigid"}


def test_two_globs_that_match_the_same_group() -> None:
    with pytest.raises(CaseError, match=r"group 'x0' is matched by two globs, 'x\*' and '\*0'; write an entry for 'x0'"):
        build_case(bare(default_boundary="rigid").surface("x*", Rigid()).surface("*0", Rigid()), tagged())


def test_a_name_that_is_no_group() -> None:
    with pytest.raises(CaseError, match=r"names the surface 'z2', but the mesh has no such group.*did you mean 'z1'"):
        build_case(job().surface("z2", Rigid()), tagged())


def test_a_glob_that_matches_nothing() -> None:
    with pytest.raises(CaseError, match=r"names the surface 'door_\*', but the mesh has no such group"):
        build_case(job().surface("door_*", Rigid()), tagged())


def test_at_most_five_errors_are_listed() -> None:
    with pytest.raises(CaseError, match=r"\n  and 3 more"):
        named = bare(default_boundary="rigid")
        for number in range(8):
            named = named.surface(f"lost_{number}", Rigid())
        build_case(named, tagged())


def test_a_triangle_in_two_groups_is_counted_once() -> None:
    groups = [(held, (name,)) for name, held in BOX.surfaces.items()] + [(BOX.surfaces["z0"][:4], ("patch",))]
    mesh = tagged_mesh(BOX.nodes, [(BOX.tets, ("air",))], groups)
    first = bare(default_boundary="rigid").surface("patch", Vibrating()).surface("z0", Rigid())
    case = build_case(first, mesh)
    assert count(case, "patch") == 4 and count(case, "z0") == len(BOX.surfaces["z0"]) - 4
    last = bare(default_boundary="rigid").surface("z0", Rigid()).surface("patch", Vibrating())
    with pytest.raises(CaseError, match=r"4 triangles are in 'z0' and in 'patch'; counted once, for 'z0'; 'patch' keeps none"):
        build_case(last, mesh)


def test_the_rest_is_rigid_only_if_said() -> None:
    with pytest.raises(
        CaseError, match=r'outer triangles, .* m2 .* have no kind; give them a kind .*default_boundary = "rigid"'
    ):
        build_case(bare().surface("x0", Rigid()), tagged())
    case = build_case(bare(default_boundary="rigid").surface("x0", Rigid()), tagged())
    assert [surface.name for surface in case.surfaces] == ["x0", UNNAMED]
    assert count(case, "x0") + count(case, UNNAMED) == len(BOX.boundary)


def test_a_mesh_without_surface_groups_has_its_outer_faces() -> None:
    mesh = tagged_mesh(quadratic(BOX).nodes, [(quadratic(BOX).tets, ("air",))], [])
    case = build_case(bare(default_boundary="rigid"), mesh)
    assert case.mesh.triangles.shape == (len(BOX.boundary), 6)
    middle = case.mesh.nodes[case.mesh.triangles[:, [0, 1, 2]]] + case.mesh.nodes[case.mesh.triangles[:, [1, 2, 0]]]
    np.testing.assert_allclose(case.mesh.nodes[case.mesh.triangles[:, 3:]], middle / 2, atol=1e-12)


# -- regions -----------------------------------------------------------------------------------------------------------


def halves() -> dict[str, Any]:
    left = BOX.centroids[:, 0] < 0.4
    return {"left": np.flatnonzero(left), "right": np.flatnonzero(~left)}


def test_two_regions_by_glob_and_name() -> None:
    made = Job(default_boundary="rigid").region("left", Air()).region("*", GivenFluid(1.8, 268.0)).with_sweep(50, 60, 5)
    case = build_case(made, tagged(regions=halves()))
    assert [region.name for region in case.regions] == ["left", "right"]
    assert set(np.flatnonzero(case.mesh.tet_region == 0)) == set(halves()["left"])


def test_a_region_by_a_box() -> None:
    rule = Rule(((-1.0, -1.0, -1.0), (0.4, 2.0, 2.0)))
    made = Job(default_boundary="rigid").region("near", GivenFluid(1.8, 268.0), where=rule).region("air", Air())
    case = build_case(made.with_sweep(50, 60, 5), tagged())
    assert set(np.flatnonzero(case.mesh.tet_region == 0)) == set(halves()["left"])


def test_one_region_needs_no_group() -> None:
    case = build_case(bare(default_boundary="rigid"), tagged(regions={}))
    assert [region.name for region in case.regions] == ["air"] and not case.mesh.tet_region.any()


def test_tetrahedra_of_no_region() -> None:
    made = Job(default_boundary="rigid").region("left", Air()).with_sweep(50, 60, 5)
    with pytest.raises(CaseError, match=r"tetrahedra belong to no region of the job; describe their group under \[regions\]"):
        build_case(made, tagged(regions=halves()))


def test_no_tetrahedra() -> None:
    with pytest.raises(CaseError, match="the mesh holds no tetrahedra; mesh the volume"):
        build_case(job(), tagged_mesh(BOX.nodes, [], [(BOX.surfaces["x0"], ("x0",))]))


# -- rules -------------------------------------------------------------------------------------------------------------


def test_a_rule_by_direction_and_box() -> None:
    up = Rule(facing=(0.0, 0.0, 1.0))
    corner = Rule(inside=((0.0, 0.0, -0.1), (0.4, 0.8, 0.1)), facing=(0.0, 0.0, -1.0))
    made = bare(default_boundary="rigid").surface("up", Vibrating(), where=up).surface("corner", Vibrating(), where=corner)
    case = build_case(made, tagged())
    assert area(case, "up") == pytest.approx(1.2 * 0.8)
    assert area(case, "corner") == pytest.approx(0.4 * 0.8)


def test_a_rule_within_a_group_and_its_angle() -> None:
    slanted = Rule(facing=(1.0, 0.0, 1.0), within_deg=46.0)
    narrow = Rule(facing=(1.0, 0.0, 1.0), within_deg=46.0, of="x*")
    wide = bare(default_boundary="rigid")
    assert area(build_case(wide.surface("s", Rigid(), where=slanted), tagged()), "s") == pytest.approx(0.8 * (1.2 + 0.6))
    assert area(build_case(wide.surface("s", Rigid(), where=narrow), tagged()), "s") == pytest.approx(0.8 * 0.6)
    none = Rule(facing=(1.0, 0.0, 1.0), within_deg=44.0)
    with pytest.raises(CaseError, match="the rule of 's' selects no triangle; check its box"):
        build_case(wide.surface("s", Rigid(), where=none), tagged())


def test_a_rule_carves_out_of_a_group() -> None:
    patch = Rule(inside=((0.0, 0.0, 0.0), (0.4, 0.8, 0.0)), of="z0")
    case = build_case(job().surface("patch", Rigid(), where=patch), tagged())
    assert area(case, "patch") == pytest.approx(0.4 * 0.8) and area(case, "z0") == pytest.approx(0.8 * 0.8)


def test_the_rule_survives_what_groups_do_not(gmsh_model: None) -> None:
    """After a boolean operation all groups are gone; the rules still find their panels, on any mesh."""
    import gmsh

    made = (
        bare(default_boundary="rigid")
        .surface("roof", Vibrating(), velocity=1e-3, where=Rule(facing=(0, 0, 1)))
        .surface("rear", Rigid(), where=Rule(inside=((-0.1, 0, 0), (0.1, 1, 1)), facing=(-1, 0, 0)))
    )
    found = []
    for size, operate in ((0.4, False), (0.25, True)):
        gmsh.clear()
        gmsh.model.add("cab")
        cab = gmsh.model.occ.addBox(0, 0, 0, 1, 0.8, 0.6)
        gmsh.model.occ.synchronize()
        gmsh.model.addPhysicalGroup(3, [cab], name="air")
        gmsh.model.addPhysicalGroup(2, [6], name="roof")
        if operate:
            other = gmsh.model.occ.addBox(0.5, 0, 0, 1, 0.8, 0.6)
            gmsh.model.occ.fragment([(3, cab)], [(3, other)])
            gmsh.model.occ.synchronize()
            gmsh.model.occ.remove(
                [(3, tag) for _, tag in gmsh.model.getEntities(3) if gmsh.model.occ.getCenterOfMass(3, tag)[0] > 1]
            )
            gmsh.model.occ.synchronize()
        gmsh.option.setNumber("Mesh.MeshSizeMax", size)
        gmsh.model.mesh.generate(3)
        if operate:
            assert "roof" not in from_gmsh().triangle_groups
        case = case_from_gmsh(made)
        found.append((area(case, "roof"), area(case, "rear")))
    assert found[0] == pytest.approx((0.8, 0.48))
    assert found[1] == pytest.approx((0.8, 0.48))


# -- loads -------------------------------------------------------------------------------------------------------------


def loads_of(case: Case) -> dict[str, complex]:
    return {load.acts_on: load.motion.value for load in case.load_case().loads if isinstance(load, SurfaceVelocity)}  # type: ignore[attr-defined]


def test_a_load_on_a_glob_takes_the_surfaces_that_can_carry_it() -> None:
    made = bare().surface("?0", Vibrating(), velocity=1e-3).surface("?1", Rigid())
    made = made.load(SurfaceVelocity("x0", Uniform(2e-3)))
    assert loads_of(build_case(made, tagged())) == {"x0": 2e-3, "y0": 1e-3, "z0": 1e-3}
    every = bare().surface("?0", Vibrating()).surface("?1", Rigid()).load(SurfaceVelocity("*", Uniform(1e-3)))
    assert set(loads_of(build_case(every, tagged()))) == {"x0", "y0", "z0"}


def test_a_load_through_two_globs() -> None:
    made = bare().surface("?0", Vibrating(), velocity=1e-3).surface("?1", Rigid()).load(SurfaceVelocity("x*", Uniform(1)))
    with pytest.raises(CaseError, match=r"'x0' is loaded through two globs, '\?0' and 'x\*'"):
        build_case(made, tagged())


@pytest.mark.parametrize("load", [SurfaceVelocity("x*", Uniform(1)), SurfacePressure("x*", 1), IncomingWave("x*", 1)])
def test_a_load_that_no_surface_can_carry(load: Any) -> None:
    made = bare().surface("*", Rigid()).load(load)
    with pytest.raises(CaseError, match=rf"no surface that can carry a {load.kind_name} matches 'x\*'"):
        build_case(made, tagged())


def test_pressure_and_wave_beside_their_surfaces() -> None:
    made = bare(default_boundary="rigid").surface("x0", Port(), wave=1.0).surface("x1", Pressure(), pressure=2.0)
    loads = build_case(made, tagged()).load_case().loads
    assert [type(load) for load in loads] == [IncomingWave, SurfacePressure]


def test_several_load_cases() -> None:
    made = job().load_case(LoadCase("other", (SurfaceVelocity("z*", Uniform(1j)),)))
    case = build_case(made, tagged())
    assert [held.name for held in case.load_cases] == ["default", "other"]
    assert [load.acts_on for load in case.load_case("other").loads] == ["z0"]


def test_a_job_without_a_sweep() -> None:
    with pytest.raises(CaseError, match="the job has no sweep"):
        build_case(Job(default_boundary="rigid").region("air", Air()), tagged())


# -- inside gmsh -------------------------------------------------------------------------------------------------------


def _model(gmsh: Any) -> Job:
    gmsh.model.occ.addBox(0, 0, 0, 1, 0.8, 0.6)
    gmsh.model.occ.synchronize()
    gmsh.model.addPhysicalGroup(3, [1], name="air")
    gmsh.model.addPhysicalGroup(2, [5], name="floor")
    gmsh.model.addPhysicalGroup(2, [1, 2, 3, 4, 6], name="walls")
    gmsh.option.setNumber("Mesh.MeshSizeMax", 0.4)
    gmsh.model.mesh.generate(3)
    return bare().surface("floor", Vibrating(), velocity=1e-3).surface("walls", Rigid()).receiver("ear", (0.5, 0.4, 0.3))


def test_case_from_the_current_model(gmsh_model: None) -> None:
    import gmsh

    case = case_from_gmsh(_model(gmsh))
    assert area(case, "floor") == pytest.approx(0.8) and case.panels == ("floor",)


@pytest.mark.parametrize("version", [2.2, 4.1])
def test_a_model_carries_its_job(gmsh_model: None, tmp_path: Path, version: float) -> None:
    import gmsh

    made = _model(gmsh)
    assert stored_job() is None
    store_job(made)
    held = stored_job()
    assert held is not None and build_case(held, from_gmsh()).checksum == case_from_gmsh(made).checksum
    gmsh.option.setNumber("Mesh.MshFileVersion", version)
    gmsh.write(str(tmp_path / "model.msh"))
    read, mesh = load_job(tmp_path / "model.msh")
    assert read.title == made.title and len(mesh.tets) == len(case_from_gmsh(made).mesh.tets)
    assert load_case_file(tmp_path / "model.msh").panels == ("floor",)


def test_a_long_job_is_not_split(gmsh_model: None, tmp_path: Path) -> None:
    """A table of 5000 rows makes 200 kB of text: more than any line buffer."""
    import gmsh

    from murmesh.solver.case.spectrum import Table

    f = np.linspace(10.0, 500.0, 5000)
    made = _model(gmsh).load(SurfaceVelocity("floor", Uniform(Table(f, np.exp(1j * f)))))
    store_job(made)
    gmsh.write(str(tmp_path / "model.msh"))
    gmsh.clear()
    gmsh.open(str(tmp_path / "model.msh"))
    held = stored_job()
    assert held is not None and held.to_json() == made.to_json()


def test_no_gmsh_session(gmsh_library: None) -> None:
    for act in (lambda: store_job(Job()), stored_job, lambda: case_from_gmsh(Job())):
        with pytest.raises(MeshError, match="gmsh is not initialised"):
            act()


# -- faces -------------------------------------------------------------------------------------------------------------


def test_outer_faces_point_out() -> None:
    for mesh in (BOX, quadratic(BOX)):
        skin = Skin(mesh.nodes, mesh.tets)
        faces = skin.corners(skin.outer)
        assert len(faces) == len(BOX.boundary)
        normal = skin.outward(faces, skin.owners(faces))
        a, b, c = (mesh.nodes[faces[:, i]] for i in range(3))
        assert np.all(np.einsum("ij,ij->i", np.cross(b - a, c - a), normal) > 0)
        assert np.all(np.einsum("ij,ij->i", skin.centroids(faces) - [0.6, 0.4, 0.3], normal) > 0)
        np.testing.assert_array_equal(skin.outward(faces[:, [0, 2, 1]], skin.owners(faces)), normal)


def test_owners_of_inner_outer_and_foreign_triangles() -> None:
    skin = Skin(BOX.nodes, BOX.tets)
    assert len(skin.joined) == (4 * len(BOX.tets) - len(BOX.boundary)) // 2
    inner = skin.tets[skin.joined[0, 0], [1, 2, 3]]
    owners = skin.owners(np.array([skin.corners(skin.outer)[0], [0, 1, 35]]))
    assert owners[0, 0] >= 0 and owners[0, 1] == -1 and list(owners[1]) == [-1, -1]
    assert len(inner) == 3 and not len(skin.overfull)


def test_resolving_leaves_mesh_and_job_alone() -> None:
    mesh, made = tagged(), job()
    before = mesh.triangles.copy()
    resolve(made, mesh)
    np.testing.assert_array_equal(mesh.triangles, before)
    assert resolve(made, box_with_stray()).findings


def box_with_stray() -> Any:
    small = box(1, 1, 1)
    return tagged_mesh(small.nodes, [(small.tets, ("air",))], [])
