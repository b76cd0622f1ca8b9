"""The cab's groups: all there, covering the air's boundary once, with the areas and the volume of the drawing."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest


def _triangles() -> dict[str, npt.NDArray[np.int64]]:
    """Node tags, (n, 3), of each physical surface."""
    import gmsh

    groups = {}
    for _, tag in gmsh.model.getPhysicalGroups(2):
        nodes = [gmsh.model.mesh.getElementsByType(2, entity)[1] for entity in gmsh.model.getEntitiesForPhysicalGroup(2, tag)]
        groups[gmsh.model.getPhysicalName(2, tag)] = np.concatenate(nodes).astype(np.int64).reshape(-1, 3)
    return groups


def _boundary() -> set[frozenset[int]]:
    """The faces that belong to one tetrahedron only."""
    import gmsh

    nodes = np.asarray(gmsh.model.mesh.getElementsByType(4)[1], dtype=np.int64).reshape(-1, 4)
    faces = np.sort(np.concatenate([np.delete(nodes, corner, axis=1) for corner in range(4)]), axis=1)
    once, count = np.unique(faces, axis=0, return_counts=True)
    return {frozenset(face) for face in once[count == 1].tolist()}


def _area(triangles: npt.NDArray[np.int64]) -> float:
    import gmsh

    tags, flat, _ = gmsh.model.mesh.getNodes()
    at = dict(zip(tags.tolist(), flat.reshape(-1, 3), strict=True))
    a, b, c = (np.array([at[tag] for tag in triangles[:, corner].tolist()]) for corner in range(3))
    return float(np.linalg.norm(np.cross(b - a, c - a), axis=1).sum() / 2)


def test_groups_cover_the_boundary_once(gmsh_model: None) -> None:
    from murmesh.sample_geometry import cab

    cab.build(0.3)
    groups = _triangles()
    assert set(groups) == {*cab.PANELS, cab.RIGID}
    tagged = [frozenset(face) for triangles in groups.values() for face in triangles.tolist()]
    assert len(tagged) == len(set(tagged))
    assert set(tagged) == _boundary()


def test_areas_and_volume_are_those_of_the_drawing(gmsh_model: None) -> None:
    import gmsh

    from murmesh.sample_geometry import cab

    cab.build(0.5)
    areas = {name: _area(triangles) for name, triangles in _triangles().items()}
    assert areas["roof"] == pytest.approx(1.45 * 1.40)
    assert areas["floor_front"] == pytest.approx(0.90 * 1.50 - 0.50 * 0.30)  # less the console's foot
    assert areas["floor_rear"] == pytest.approx(0.80 * 1.50 - 0.50 * 0.50)  # less the seat
    assert areas["seat"] == pytest.approx(4 * 0.5 * 0.9 + 0.5 * 0.5)
    slant = math.hypot(1.66, 0.20) / 1.66
    assert areas["windscreen_lower"] + areas["windscreen_upper"] == pytest.approx(1.66 * slant * (1.50 + 1.40) / 2)
    for left in ("door_left_glass", "rear_quarter_left"):
        assert areas[left] == pytest.approx(areas[left.replace("left", "right")])
    assert areas["door_right_skin"] < areas["door_left_skin"]  # the console covers a part of it

    [(dim, air)] = gmsh.model.getEntities(3)
    whole = 1.66 / 6 * (1.70 * 1.50 + 4 * 1.575 * 1.45 + 1.45 * 1.40)  # Simpson's rule is exact for a prismatoid
    console = 0.50 * 0.45 * (0.30 - 0.05 * 0.45 / 1.66 / 2)  # to the wall's mean half width
    assert gmsh.model.occ.getMass(dim, air) == pytest.approx(whole - 0.5 * 0.5 * 0.9 - console)
    assert gmsh.model.getPhysicalName(3, gmsh.model.getPhysicalGroupsForEntity(3, air)[0]) == cab.AIR


def test_mesh_has_no_flat_tetrahedra(gmsh_model: None) -> None:
    import gmsh

    from murmesh.sample_geometry import cab

    cab.build()
    tags, _ = gmsh.model.mesh.getElementsByType(4)
    assert 1000 < len(tags) < 2500
    assert min(gmsh.model.mesh.getElementQualities(tags, "gamma")) > 0.2


def test_ears_lie_in_the_air_clear_of_every_surface(gmsh_model: None) -> None:
    import gmsh

    from murmesh.sample_geometry import cab

    cab.build(0.5)
    assert math.dist(cab.LEFT_EAR, cab.RIGHT_EAR) == pytest.approx(0.16)
    for ear in (cab.LEFT_EAR, cab.RIGHT_EAR):
        assert gmsh.model.isInside(3, gmsh.model.getEntities(3)[0][1], ear)
        for _, surface in gmsh.model.getEntities(2):
            closest, _ = gmsh.model.getClosestPoint(2, surface, ear)
            # the closest point is that of the whole plane: it counts only where the plane is a wall
            assert math.dist(closest, ear) > 0.3 or not gmsh.model.isInside(2, surface, closest)


def test_script_writes_a_mesh_with_names(gmsh_library: None, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    from murmesh.sample_geometry import cab

    cab.main(["--size", "0.5", str(tmp_path / "cab.msh")])
    assert "14 panels" in capsys.readouterr().out
    text = (tmp_path / "cab.msh").read_text(encoding="utf-8", errors="replace")
    assert all(f'"{name}"' in text for name in (*cab.PANELS, cab.RIGID, cab.AIR))


def test_duct_tags_its_whole_boundary(gmsh_model: None) -> None:
    from importlib.resources import files

    import gmsh

    gmsh.open(str(files("murmesh.sample_geometry") / "duct.geo"))
    gmsh.model.mesh.generate(3)
    groups = _triangles()
    tagged = [frozenset(face) for triangles in groups.values() for face in triangles.tolist()]
    assert len(tagged) == len(set(tagged))
    assert set(tagged) == _boundary()
    areas = {name: _area(triangles) for name, triangles in groups.items()}
    assert areas == pytest.approx({"inlet": 0.06, "outlet": 0.06, "lining": 0.4, "walls": 0.8})
