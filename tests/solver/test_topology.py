"""Entity numbers, neighbours, and surfaces opened in the numbering."""

from __future__ import annotations

import numpy as np
import pytest

from meshes import TestMesh, box, faces_where, shuffled
from murmesh.solver.errors import MeshError
from murmesh.solver.topology import Topology


def _sheet(mesh: TestMesh, inside) -> np.ndarray:
    return faces_where(mesh, lambda x: np.isclose(x[..., 0], 0.5) & inside(x))


def _extra(mesh: TestMesh, open_faces: np.ndarray) -> tuple[int, int, int]:
    """Vertices, edges and faces added by opening."""
    closed, opened = Topology.build(mesh.tets), Topology.build(mesh.tets, open_faces)
    return (
        opened.n_vertices - closed.n_vertices,
        opened.n_edges - closed.n_edges,
        opened.n_faces - closed.n_faces,
    )


def test_euler_characteristic_and_counts() -> None:
    mesh = shuffled(box(3, 2, 2))
    topology = Topology.build(mesh.tets)
    assert topology.n_vertices == len(mesh.nodes)
    assert topology.n_vertices - topology.n_edges + topology.n_faces - topology.n_tets == 1
    assert 4 * topology.n_tets == 2 * topology.n_faces - len(mesh.boundary)
    for ids, count in (
        (topology.tet_vertex_ids, topology.n_vertices),
        (topology.tet_edge_ids, topology.n_edges),
        (topology.tet_face_ids, topology.n_faces),
    ):
        np.testing.assert_array_equal(np.unique(ids), np.arange(count))


def test_unused_nodes_get_no_vertex() -> None:
    topology = Topology.build([[7, 3, 9, 5]])
    np.testing.assert_array_equal(topology.vertex_nodes, [3, 5, 7, 9])
    np.testing.assert_array_equal(topology.sorted_vertices, [[1, 3, 0, 2]])


def test_mid_edge_nodes_do_not_matter() -> None:
    mesh = box(2, 1, 1)
    ten = np.hstack([mesh.tets, np.arange(6 * len(mesh.tets)).reshape(-1, 6) + 100])
    np.testing.assert_array_equal(Topology.build(ten).tet_edge_ids, Topology.build(mesh.tets).tet_edge_ids)


def test_sides_of_outer_and_inner_triangles() -> None:
    mesh = shuffled(box(2, 2, 2))
    topology = Topology.build(mesh.tets)
    inner = _sheet(mesh, lambda x: x[..., 1] < 2)
    for triangles, sides in ((mesh.boundary, 1), (inner, 2)):
        tet, face = topology.sides_of(np.random.default_rng(0).permuted(triangles, axis=1))
        assert np.all((tet >= 0).sum(axis=1) == sides)
        for column in range(sides):
            own = mesh.tets[tet[:, column]]
            rest = np.take_along_axis(own, (face[:, column, None] + np.array([1, 2, 3])) % 4, axis=1)
            np.testing.assert_array_equal(np.sort(rest, axis=1), np.sort(triangles, axis=1))
        assert sides == 2 or np.all(face[:, 1] == -1)
    tet, face = topology.boundary_sides()
    assert len(tet) == len(mesh.boundary)


def test_sides_of_no_triangles() -> None:
    tet, face = Topology.build(box(1, 1, 1).tets).sides_of(np.zeros((0, 3), dtype=int))
    assert tet.shape == face.shape == (0, 2)


def test_open_to_the_wall_adds_all_but_the_rim() -> None:
    """A sheet of 2 x 4 squares that ends inside: 15 nodes, 30 edges, 16 triangles, a rim of 5 nodes and 4 edges."""
    mesh = shuffled(box(4, 4, 4))
    assert _extra(mesh, _sheet(mesh, lambda x: x[..., 1] < 0.51)) == (10, 26, 16)


def test_sheet_inside_keeps_its_whole_rim() -> None:
    """2 x 2 squares away from all walls: one node, 16 - 8 edges and 8 triangles are split."""
    mesh = shuffled(box(4, 4, 4))
    inside = _sheet(mesh, lambda x: np.all((x[..., 1:] > 0.2) & (x[..., 1:] < 0.8), axis=-1))
    assert _extra(mesh, inside) == (1, 8, 8)


def test_sheet_across_splits_everything() -> None:
    mesh = box(4, 4, 4)
    assert _extra(mesh, _sheet(mesh, lambda x: x[..., 1] < 2)) == (25, 56, 32)


def test_triangle_with_all_corners_on_the_rim_is_still_split() -> None:
    mesh = box(4, 4, 4)
    pair = _sheet(mesh, lambda x: np.all((x[..., 1:] > 0.2) & (x[..., 1:] < 0.6), axis=-1))
    assert len(pair) == 2
    assert _extra(mesh, pair[:1]) == (0, 0, 1)
    assert _extra(mesh, pair) == (0, 1, 2)  # the edge between the two lies inside the sheet, its ends do not


def test_crossing_sheets_part_into_four() -> None:
    mesh = box(2, 2, 1)
    cross = faces_where(mesh, lambda x: np.isclose(x[..., 0], 0.5))
    cross = np.vstack([cross, faces_where(mesh, lambda x: np.isclose(x[..., 1], 0.5))])
    topology = Topology.build(mesh.tets, cross)
    middle = np.flatnonzero(np.all(np.isclose(mesh.nodes[:, :2], 0.5), axis=1))
    assert [int((topology.vertex_nodes == node).sum()) for node in middle] == [4, 4]


def test_opening_keeps_neighbours_apart_and_numbers_dense() -> None:
    mesh = shuffled(box(4, 2, 2))
    topology = Topology.build(mesh.tets, _sheet(mesh, lambda x: x[..., 1] < 2))
    left = mesh.centroids[:, 0] < 0.5
    for ids, count in (
        (topology.tet_vertex_ids, topology.n_vertices),
        (topology.tet_edge_ids, topology.n_edges),
        (topology.tet_face_ids, topology.n_faces),
    ):
        np.testing.assert_array_equal(np.unique(ids), np.arange(count))
        assert not np.intersect1d(ids[left], ids[~left]).size
    nodes = np.take_along_axis(mesh.tets, topology.sorted_vertices, axis=1)
    np.testing.assert_array_equal(topology.vertex_nodes[topology.tet_vertex_ids], nodes)


def test_open_faces_still_have_two_sides() -> None:
    mesh = box(4, 2, 2)
    sheet = _sheet(mesh, lambda x: x[..., 1] < 2)
    assert np.all(Topology.build(mesh.tets, sheet).sides_of(sheet)[0] >= 0)


def test_errors() -> None:
    mesh = box(2, 1, 1)
    topology = Topology.build(mesh.tets)
    with pytest.raises(MeshError, match=r"triangle 1 with nodes \[0, 1, 99\] is a face of no tetrahedron \(1 of 2"):
        topology.sides_of(np.vstack([mesh.boundary[:1], [[0, 1, 99]]]))
    with pytest.raises(MeshError, match="lies on the outside of the mesh"):
        Topology.build(mesh.tets, mesh.boundary[:1])
    with pytest.raises(MeshError, match="embed the two-sided surface"):
        Topology.build(mesh.tets, [[0, 1, 99]])
    with pytest.raises(MeshError, match=r"tetrahedron 1 repeats a corner: \[4, 1, 1, 2\]"):
        Topology.build([[0, 1, 2, 3], [4, 1, 1, 2]])
    with pytest.raises(MeshError, match=r"tetrahedra \[0, 1, 2\] share one face"):
        Topology.build([[0, 1, 2, 3], [0, 1, 2, 4], [0, 1, 2, 5]])
    with pytest.raises(MeshError, match=r"triangles of shape \(3,\) were given; expected \(m, 3\) or \(m, 6\)"):
        topology.sides_of([0, 1, 2])
    with pytest.raises(MeshError, match=r"expected \(t, 4\) or \(t, 10\)"):
        Topology.build([[0, 1, 2]])
