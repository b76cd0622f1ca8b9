"""Quadrature and the hierarchic basis on one tetrahedron."""

from __future__ import annotations

import itertools
from math import factorial

import numpy as np
import pytest

from murmesh.solver.elements.quadrature import tetrahedron_rule, triangle_rule
from murmesh.solver.elements.tetrahedron import (
    EDGES,
    FACE_EDGES,
    FACES,
    basis,
    face_functions,
    face_prefix,
    function_count,
    layout,
    reference_face_mass,
    reference_matrices,
    triangle_basis,
)
from murmesh.solver.errors import MeshError

ORDERS = range(1, 9)


def _points(corners: int, count: int = 7) -> np.ndarray:
    """Random barycentric points on the given corner subset of the tetrahedron."""
    return np.random.default_rng(3).dirichlet(np.ones(corners), count)


def _on(corners: np.ndarray, count: int = 7) -> np.ndarray:
    out = np.zeros((count, 4))
    out[:, corners] = _points(len(corners), count)
    return out


def _exact(powers: tuple[int, ...]) -> float:
    """int prod lambda_i^a_i = prod a_i! / (sum a_i + d)!  (Stroud 1971, section 7.1)."""
    value = 1.0
    for power in powers:
        value *= factorial(power)
    return value / factorial(sum(powers) + len(powers) - 1)


@pytest.mark.parametrize("degree", [0, 1, 2, 5, 8, 13, 19])
@pytest.mark.parametrize(("rule", "corners"), [(triangle_rule, 3), (tetrahedron_rule, 4)])
def test_rule_is_exact_to_its_degree(rule, corners, degree) -> None:
    points, weights = rule(degree)
    assert weights.sum() == pytest.approx(1 / factorial(corners - 1), rel=1e-14)
    assert np.all(points > 0)
    assert np.all(weights > 0)
    for first in range(degree + 1):
        powers = (first, degree - first, *[0] * (corners - 2))
        for permuted in set(itertools.permutations(powers)):
            got = weights @ np.prod(points ** np.array(permuted), axis=1)
            assert got == pytest.approx(_exact(permuted), rel=1e-11)


@pytest.mark.parametrize(("rule", "corners"), [(triangle_rule, 3), (tetrahedron_rule, 4)])
def test_rule_is_inexact_above_its_degree(rule, corners) -> None:
    points, weights = rule(5)
    powers = (7, *[0] * (corners - 1))
    assert weights @ points[:, 0] ** 7 != pytest.approx(_exact(powers), rel=1e-6)


def test_rules_cannot_be_changed() -> None:
    with pytest.raises(ValueError, match="read-only"):
        tetrahedron_rule(2)[1][0] = 1.0


@pytest.mark.parametrize("order", ORDERS)
def test_count_and_layout(order) -> None:
    local = layout(order)
    assert local.size == (order + 1) * (order + 2) * (order + 3) // 6
    assert local.degree.max() == order
    sizes = np.diff(local.starts)
    expected = [int(function_count(kind, order)) for kind in (0, 1, 2, 3)]
    assert sizes.tolist() == [expected[0]] * 4 + [expected[1]] * 6 + [expected[2]] * 4 + [expected[3]]
    for entity in range(15):
        assert np.all(np.diff(local.degree[local.entity == entity]) >= 0)


@pytest.mark.parametrize("order", ORDERS)
def test_functions_are_independent(order) -> None:
    mass = reference_matrices(order)[1]
    scale = 1 / np.sqrt(np.diag(mass))
    assert np.linalg.cond(mass * scale * scale[:, None]) < 1e6


@pytest.mark.parametrize("order", ORDERS)
def test_lower_order_is_a_prefix_of_every_entity(order) -> None:
    points = _points(4)
    high, low = layout(8), layout(order)
    rank = np.arange(low.size) - low.starts[low.entity]
    prefix = high.starts[low.entity] + rank
    for a, b in zip(basis(8, points), basis(order, points), strict=True):
        np.testing.assert_allclose(a[:, prefix], b, atol=1e-14)
    np.testing.assert_array_equal(high.degree[prefix], low.degree)


def test_each_function_has_its_degree() -> None:
    """Along a line the (n+1)-th difference of a function of degree n vanishes and the n-th does not."""
    start, end = _points(4, 2)
    line = start + np.linspace(0, 1, 10)[:, None] * (end - start)
    values, local = basis(8, line)[0], layout(8)
    for degree in range(1, 9):
        chosen = values[:, local.degree == degree]
        scale = abs(chosen).max(axis=0)
        assert np.all(abs(np.diff(chosen, degree + 1, axis=0)) < 1e-10 * np.maximum(scale, 1e-3))
        assert np.all(abs(np.diff(chosen, degree, axis=0)).max(axis=0) > 1e-12)


@pytest.mark.parametrize("order", ORDERS)
def test_derivatives(order) -> None:
    points = _points(4)
    derivatives = basis(order, points)[1]
    for i in range(4):
        step = 1e-5 * np.eye(4)[i]
        difference = (basis(order, points + step)[0] - basis(order, points - step)[0]) / 2e-5
        np.testing.assert_allclose(derivatives[..., i], difference, atol=2e-7)


def test_functions_vanish_away_from_their_entity() -> None:
    local = layout(8)
    for face in range(4):
        values = basis(8, _on(FACES[face]))[0]
        there = face_functions(8, face)
        away = np.setdiff1d(np.arange(local.size), there)
        assert abs(values[:, away]).max() < 1e-13
        assert np.all(abs(values[:, there]).max(axis=0) > 1e-8)
    for number, edge in enumerate(EDGES):
        values = basis(8, _on(edge))[0]
        there = np.isin(local.entity, [*edge, 4 + number])
        assert abs(values[:, ~there]).max() < 1e-13
    assert abs(basis(8, np.eye(4))[0][:, 4:]).max() < 1e-13


def test_face_edges_join_the_corners_of_the_face() -> None:
    for corners, edges in zip(FACES, FACE_EDGES, strict=True):
        np.testing.assert_array_equal(EDGES[edges], corners[[[0, 1], [0, 2], [1, 2]]])


@pytest.mark.parametrize("order", ORDERS)
def test_traces_of_all_faces_agree(order) -> None:
    """The same sorted corners give the same functions on each of the four faces: no signs, no permutations."""
    lam = _points(3)
    expected = triangle_basis(order, lam)
    for face in range(4):
        bary = np.zeros((len(lam), 4))
        bary[:, FACES[face]] = lam
        np.testing.assert_allclose(basis(order, bary)[0][:, face_functions(order, face)], expected, atol=1e-14)


@pytest.mark.parametrize("order", ORDERS)
def test_reference_matrices(order) -> None:
    stiffness, mass = reference_matrices(order)
    constant = np.zeros(len(mass))
    constant[:4] = 1.0
    assert constant @ mass @ constant == pytest.approx(1 / 6)
    assert abs(stiffness @ constant).max() < 1e-13
    x = np.zeros(len(mass))
    x[1] = 1.0  # lambda_1 = x on the unit tetrahedron
    assert [x @ r @ x for r in stiffness] == pytest.approx([1 / 6, 0, 0, 0, 0, 0], abs=1e-15)
    face = reference_face_mass(order)
    prefix = face_prefix(order, 8)
    np.testing.assert_allclose(reference_face_mass(8)[np.ix_(prefix, prefix)], face, atol=1e-14)


@pytest.mark.parametrize("order", [0, 9, -1])
def test_unknown_order(order) -> None:
    with pytest.raises(MeshError, match=f"element order {order} was asked for; orders 1 to 8 exist"):
        basis(order, np.full((1, 4), 0.25))
    with pytest.raises(MeshError, match="orders 1 to 8"):
        layout(order)
