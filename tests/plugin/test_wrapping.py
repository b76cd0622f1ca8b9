"""A model wrapped in air: shape and gap, groups that survive, openings that join, ground planes, refusals; and its sound."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from murmesh.plugin.job import Job
from murmesh.plugin.mesh_source import TaggedMesh, from_gmsh, read_mesh
from murmesh.plugin.model import build_case
from murmesh.plugin.wrapping import Wrap, ellipsoid, wrap
from murmesh.solver.case.boundary import Radiating, Vibrating
from murmesh.solver.case.medium import GivenFluid
from murmesh.solver.errors import CaseError, FieldError, MeshError
from murmesh.solver.space import discretise
from murmesh.solver.sweep import solve

RHO, C = 1.205, 343.0
AIR = GivenFluid(RHO, C)


def _meshed(size: float, order: int = 1) -> TaggedMesh:
    import gmsh

    gmsh.option.setNumber("Mesh.MeshSizeMax", size)
    gmsh.model.mesh.generate(3)
    gmsh.model.mesh.setOrder(order)
    return from_gmsh()


def _ball(radius: float = 0.25, centre: tuple[float, float, float] = (0.1, 0.0, 0.0)) -> None:
    import gmsh

    ball = gmsh.model.occ.addSphere(*centre, radius)
    gmsh.model.occ.synchronize()
    gmsh.model.addPhysicalGroup(2, _faces(ball), name="ball")


def _faces(volume: int) -> list[int]:
    import gmsh

    return [tag for _, tag in gmsh.model.getBoundary([(3, volume)], oriented=False)]


def _pieces(mesh: TaggedMesh) -> int:
    """Bodies of tetrahedra that hang together by their nodes."""
    t = mesh.tets[:, :4]
    rows, columns = t[:, [0, 1, 2]].ravel(), t[:, [1, 2, 3]].ravel()
    size = len(mesh.nodes)
    label = connected_components(coo_matrix((np.ones(len(rows)), (rows, columns)), (size, size)), directed=False)[1]
    return len(np.unique(label[np.unique(t)]))


def _volumes(mesh: TaggedMesh, group: str) -> float:
    x = mesh.nodes[mesh.tets[mesh.tet_groups[group]][:, :4]]
    return float(np.abs(np.linalg.det(x[:, 1:] - x[:, :1])).sum() / 6)


# ---------------------------------------------------------------------------------------------------------------------
# shape


def test_a_sphere_in_a_sphere_has_the_volume_between(gmsh_model: None) -> None:
    _ball()
    found = wrap(gap=0.1)
    assert found.ellipsoid.centre == pytest.approx((0.1, 0.0, 0.0))
    assert found.ellipsoid.axes == pytest.approx((0.35,) * 3)
    mesh = _meshed(0.08, order=2)
    assert set(mesh.triangle_groups) == {"ball", "outside"} and set(mesh.tet_groups) == {"outside_air"}
    nodes = mesh.nodes - found.ellipsoid.centre
    for group, radius in {"ball": 0.25, "outside": 0.35}.items():
        corners = mesh.triangles[mesh.triangle_groups[group]]
        assert np.linalg.norm(nodes[corners], axis=2) == pytest.approx(radius, rel=1e-4)
    exact = 4 / 3 * math.pi * (0.35**3 - 0.25**3)
    assert _volumes(mesh, "outside_air") == pytest.approx(exact, rel=0.05)  # flat faces


@pytest.mark.parametrize("shape", ["ellipsoid", "sphere"])
@pytest.mark.parametrize("gap", [0.01, 0.2])
def test_every_point_keeps_the_gap_and_one_touches_it(shape: str, gap: float) -> None:
    points = np.random.default_rng(4).uniform([-1, -0.3, 0], [1, 0.3, 0.5], (300, 3))
    found = ellipsoid(points, Wrap(gap, shape))
    u = np.random.default_rng(5).normal(size=(40000, 3))
    surface = found.centre + np.asarray(found.axes) * u / np.linalg.norm(u, axis=1, keepdims=True)
    distance = np.linalg.norm(points[:, None] - surface[None, ::40], axis=2).min(axis=1)
    near = points[np.argsort(distance)[:20]]
    least = min(float(np.linalg.norm(surface - x, axis=1).min()) for x in near)
    assert gap - 1e-9 <= least < gap + 0.02
    assert (len(set(found.axes)) == 1) == (shape == "sphere")


@pytest.mark.parametrize(("up", "box"), [("x", (0.6, 0.4, 0.5)), ("y", (0.4, 0.6, 0.5)), ("z", (0.4, 0.5, 0.6))])
def test_a_dome_ends_on_the_ground_whichever_axis_points_up(
    gmsh_model: None, up: str, box: tuple[float, float, float]
) -> None:
    """In a model in decimetres, wrapped in metres; the ground is tagged, and the infinite elements accept the dome."""
    import gmsh

    body = gmsh.model.occ.addBox(0, 0, 0, *(10 * v for v in box))
    gmsh.model.occ.synchronize()
    gmsh.model.addPhysicalGroup(2, _faces(body), name="box")
    found = wrap(gap=0.1, ground=0.0, up=up, scale=0.1)
    axis = "xyz".index(up)
    assert found.ellipsoid.centre[axis] == 0.0
    mesh = _meshed(2.0).scaled(0.1)
    assert set(mesh.triangle_groups) == {"box", "outside", "ground"}
    low, high = mesh.nodes.min(axis=0), mesh.nodes.max(axis=0)
    assert low[axis] == pytest.approx(0.0, abs=1e-9) and high[axis] == pytest.approx(found.ellipsoid.axes[axis], rel=1e-6)
    assert mesh.nodes[mesh.triangles[mesh.triangle_groups["ground"]]][..., axis] == pytest.approx(0.0, abs=1e-9)
    normal = tuple(float(i == axis) for i in range(3))
    job = _job(Radiating(ground="rigid", ground_normal=normal)).surface("box", Vibrating(), velocity=1e-3)
    [outer] = discretise(build_case(job, mesh)).envelopes
    assert outer.envelope.centre == pytest.approx(found.ellipsoid.centre, abs=1e-6)


def test_the_outer_surface_takes_its_own_element_size(gmsh_model: None) -> None:
    _ball()
    wrap(gap=0.1, size=0.06)
    fine = len(_meshed(0.3).triangle_groups["outside"])
    assert fine > 500


# ---------------------------------------------------------------------------------------------------------------------
# groups and openings


def _box_with_duct() -> None:
    """A solid box on the ground; a duct of air leads from a pocket of air in it through its wall, and further."""
    import gmsh

    occ = gmsh.model.occ
    box = occ.addBox(-0.5, -0.4, 0, 1, 0.8, 0.6)
    pocket = occ.addBox(-0.2, -0.2, 0.1, 0.4, 0.4, 0.3)
    duct = occ.addBox(0.2, -0.1, 0.2, 0.3, 0.2, 0.1)
    occ.fragment([(3, box)], [(3, pocket), (3, duct)])
    occ.synchronize()
    for name, volume in {"pocket": pocket, "duct": duct}.items():
        gmsh.model.addPhysicalGroup(3, [volume], name=f"{name}_air")
    gmsh.model.addPhysicalGroup(2, gmsh.model.getEntitiesInBoundingBox(0.19, -1, 0, 0.51, 1, 0.5, 2)[0][1:], 7, "some")
    ends = [tag for tag in _faces(duct) if abs(gmsh.model.occ.getCenterOfMass(2, tag)[0] - 0.5) < 1e-6]
    gmsh.model.addPhysicalGroup(2, ends, 9, "mouth")
    gmsh.model.addPhysicalGroup(
        2, [tag for tag in _faces(pocket) if gmsh.model.occ.getCenterOfMass(2, tag)[2] < 0.11], name="low"
    )
    gmsh.model.addPhysicalGroup(1, [gmsh.model.getEntities(1)[0][1]], name="an_edge")


def test_openings_join_inside_and_outside(gmsh_model: None) -> None:
    """One body of air, whose parts share their nodes; the mouth lies inside it, and groups keep names and numbers."""
    import gmsh

    _box_with_duct()
    wrap(gap=0.2, ground=0.0)
    mesh = _meshed(0.3)
    assert _pieces(mesh) == 1
    assert set(mesh.tet_groups) == {"pocket_air", "duct_air", "outside_air"}
    assert _volumes(mesh, "pocket_air") == pytest.approx(0.4 * 0.4 * 0.3)
    assert {"mouth", "low", "outside", "ground"} <= set(mesh.triangle_groups)
    assert gmsh.model.getPhysicalName(2, 9) == "mouth"
    corners = [frozenset(c) for c in mesh.triangles[mesh.triangle_groups["mouth"]].tolist()]
    sides = [sum(set(c) <= set(t) for t in mesh.tets.tolist()) for c in corners]
    assert corners and set(sides) == {2}
    assert "an_edge" in mesh.other_groups


def test_volumes_without_a_group_are_solid_and_sealed_cavities_are_left_out(gmsh_model: None) -> None:
    import gmsh

    occ = gmsh.model.occ
    outer, inner = occ.addBox(0, 0, 0, 1, 1, 1), occ.addBox(0.3, 0.3, 0.3, 0.4, 0.4, 0.4)
    occ.cut([(3, outer)], [(3, inner)])
    occ.synchronize()
    wrap(gap=0.2)
    mesh = _meshed(0.5)
    assert _pieces(mesh) == 1
    inside = np.all((mesh.nodes[mesh.tets[:, :4]].mean(axis=1) > 0) & (mesh.nodes[mesh.tets[:, :4]].mean(axis=1) < 1), axis=1)
    assert not inside.any()


def test_groups_named_solid_are_cut_out(gmsh_model: None) -> None:
    import gmsh

    _box_with_duct()
    [shell] = [tag for _, tag in gmsh.model.getEntities(3) if not len(gmsh.model.getPhysicalGroupsForEntity(3, tag))]
    gmsh.model.addPhysicalGroup(3, [shell], name="shell")
    wrap(gap=0.2, ground=0.0, solid=("shell",))
    assert set(_meshed(0.3).tet_groups) == {"pocket_air", "duct_air", "outside_air"}


def test_thin_surfaces_stay_in_the_air(gmsh_model: None) -> None:
    import gmsh

    plate = gmsh.model.occ.addRectangle(-0.2, -0.2, 0.3, 0.4, 0.4)
    gmsh.model.occ.synchronize()
    gmsh.model.addPhysicalGroup(2, [plate], name="plate")
    wrap(gap=0.2, ground=0.0)
    mesh = _meshed(0.2)
    assert set(mesh.triangle_groups) == {"plate", "outside", "ground"}
    nodes = set(np.unique(mesh.triangles[mesh.triangle_groups["plate"]]).tolist())
    assert nodes <= set(np.unique(mesh.tets).tolist())


# ---------------------------------------------------------------------------------------------------------------------
# the job


def _job(outside: Radiating) -> Job:
    job = Job(default_boundary="rigid").region("outside_air", AIR).surface("outside", outside)
    return job.with_sweep(frequencies=[C / (2 * math.pi * 0.25)], order=4)  # k a = 1 for the ball


SCRIPT = """
import gmsh
gmsh.initialize()
ball = gmsh.model.occ.addSphere(0, 0, 0, 250, -1, {lowest})
gmsh.model.occ.synchronize()
gmsh.model.addPhysicalGroup(2, [tag for _, tag in gmsh.model.getBoundary([(3, ball)], oriented=False)], name="ball")
"""
TOML = """
default_boundary = "rigid"
[mesh]
file = "ball.py"
unit = "mm"
size = 0.15
[wrap]
gap = 0.08
[regions.outside_air]
medium = { kind = "fluid", density = 1.205, speed = 343.0 }
[surfaces.ball]
kind = "vibrating"
velocity = 0.01
[surfaces.outside]
kind = "radiating"
[sweep]
frequencies = [109.0, 218.0]
order = 3
"""
DOME = TOML.replace("gap = 0.08", "gap = 0.08\nground = 0.0").replace('"radiating"', '"radiating"\nground = "rigid"')


@pytest.mark.parametrize("half", [False, True])
def test_a_wrapped_pulsating_sphere_radiates_what_theory_says(gmsh_library: None, tmp_path: Path, half: bool) -> None:
    """From a job: W = S |U|^2/2 rho c (ka)^2/(1 + (ka)^2), as p = rho c U i ka/(1 + i ka) on it (Pierce, Acoustics, ch. 4).

    Half a sphere on a rigid ground radiates half of it, for its image is the other half.
    """
    (tmp_path / "ball.py").write_text(SCRIPT.format(lowest=0.0 if half else -1.5707963267948966))
    (tmp_path / "ball.toml").write_text(DOME if half else TOML)
    job = Job.from_toml(tmp_path / "ball.toml")
    assert job.wrap is not None and job.wrap.gap == 0.08
    result = solve(build_case(job, job.read_mesh(tmp_path)))
    ka = 2 * np.pi * result.frequencies / C * 0.25
    exact = (2 if half else 4) * np.pi * 0.25**2 * 0.01**2 / 2 * RHO * C * ka**2 / (1 + ka**2)
    radiated = result.load_cases[0].absorbed[:, result.power_labels.index("radiated/outside")]
    assert radiated == pytest.approx(exact, rel=0.01)
    assert np.abs(result.imbalance()).max() < 1e-9


def test_the_table_goes_through_the_job_file(tmp_path: Path) -> None:
    job = Job().with_mesh("pump.step").with_wrap(0.2, ground=-0.1, up="y", shape="sphere", solid=("steel_*",), size=0.1)
    job.to_toml(tmp_path / "job.toml")
    held = Job.from_toml(tmp_path / "job.toml").wrap
    assert held is not None
    assert (held.gap, held.ground, held.up, held.shape, held.solid, held.size) == (0.2, -0.1, "y", "sphere", ("steel_*",), 0.1)
    (tmp_path / "wrong.toml").write_text("[wrap]\ngab = 0.2\n")
    with pytest.raises(FieldError, match=r"wrong.toml: job/wrap: unknown key 'gab'; .*'?gap"):
        Job.from_toml(tmp_path / "wrong.toml")


def test_a_step_file_is_wrapped(gmsh_library: None, tmp_path: Path) -> None:
    import gmsh

    gmsh.initialize(readConfigFiles=False, interruptible=False)
    gmsh.option.setNumber("General.Terminal", 0)
    gmsh.model.occ.addBox(0, 0, 0, 400, 500, 600)
    gmsh.model.occ.synchronize()
    gmsh.write(str(tmp_path / "box.step"))
    gmsh.finalize()
    mesh = read_mesh(tmp_path / "box.step", size=0.3, wrap=Wrap(0.1, ground=0.0), order=1)
    assert set(mesh.triangle_groups) == {"outside", "ground"}
    assert float(mesh.nodes[:, 2].min()) == pytest.approx(0.0, abs=1e-9)
    assert 1.0 < mesh.extent < 1.5


# ---------------------------------------------------------------------------------------------------------------------
# refusals


def test_a_gap_is_above_zero() -> None:
    with pytest.raises(FieldError, match=r"gap = 0.0 m must be above zero; check the value and its unit"):
        Wrap(0.0)


def test_the_names_of_the_groups_differ() -> None:
    with pytest.raises(FieldError, match=r"name = 'ground', .* floor = 'ground'; give three names"):
        Wrap(0.1, name="ground")


def test_a_model_through_the_ground_is_refused(gmsh_model: None) -> None:
    _ball()
    with pytest.raises(
        CaseError, match=r"the model reaches 0.25 m below the ground plane z = 0 m, at \(.*\) m; .* move the model"
    ):
        wrap(gap=0.1, ground=0.0)


def test_a_model_is_wrapped_once(gmsh_model: None) -> None:
    _ball()
    wrap(gap=0.1)
    with pytest.raises(CaseError, match=r"already has a surface group 'outside'; wrap it once, or give"):
        wrap(gap=0.1)


def test_a_solid_that_is_not_there_is_named(gmsh_model: None) -> None:
    _box_with_duct()
    with pytest.raises(CaseError, match=r"no volume group matches solid = 'duct_ai'; .*duct_air"):
        wrap(gap=0.1, solid=("duct_ai",))


def test_what_cannot_be_cut_is_refused(gmsh_model: None, tmp_path: Path) -> None:
    import gmsh

    with pytest.raises(MeshError, match=r"holds no volume and no surface; build or open a geometry"):
        wrap(gap=0.1)
    _ball()
    _meshed(0.2)
    gmsh.write(str(tmp_path / "ball.msh"))
    (tmp_path / "ball.vtu").touch()
    with pytest.raises(MeshError, match=r"which cannot be cut; expected OpenCASCADE geometry: use SetFactory"):
        read_mesh(tmp_path / "ball.msh", wrap=Wrap(0.1))
    with pytest.raises(CaseError, match=r"is a mesh, which cannot be wrapped; give its geometry"):
        read_mesh(tmp_path / "ball.vtu", wrap=Wrap(0.1))
