"""A lossy box with exact series: Green's function, contributions of panels, and one treated wall at a time.

Sources of the values: headers of A02, A03 and A05 in tests/references (Morse & Ingard; Kuttruff).
"""

from __future__ import annotations

from functools import cache
from itertools import pairwise
from typing import Any

import numpy as np

from cases import case_of, lossy, monopole
from meshes import TestMesh, box, faces_where, grid
from murmesh.solver.case.boundary import Boundary, Impedance, Vibrating
from murmesh.solver.case.load import SurfaceVelocity
from murmesh.solver.case.motion import Uniform
from murmesh.solver.case.wall import Given
from murmesh.solver.contribution import participation, rank
from murmesh.solver.sweep import solve
from reading import read_json_reference

LENGTHS = (1.9, 1.35, 1.1)


@cache
def _reference(name: str) -> Any:
    return read_json_reference(name)


def test_green_function_a02() -> None:
    reference = _reference("A02_box_monopole_green.json")
    rows = reference["rows"]
    points = sorted({tuple(row["r"]) for row in rows})
    case = case_of(
        box(4, 3, 3, LENGTHS),
        {},
        [monopole(tuple(reference["rs"]))],
        {row["f"] for row in rows},
        {str(i): point for i, point in enumerate(points)},
        damping=lossy(reference["eta"]),
        order=6,
    )
    result = solve(case)
    for row in rows:
        line = int(np.argmin(np.abs(result.frequencies - row["f"])))
        found = result.load_cases[0].contributions[line, points.index(tuple(row["r"])), 0]
        exact = complex(*row["p"])
        assert abs(found - exact) < 0.01 * abs(exact), row
        assert abs(20 * np.log10(abs(found) / abs(exact))) < 0.1


def _panel_mesh(panels: list[dict[str, Any]]) -> TestMesh:
    """A grid whose planes hold every edge of every panel; panels become surfaces, the rest of the walls "walls"."""
    planes: list[set[float]] = [{0.0, length} for length in LENGTHS]
    for panel in panels:
        others = [axis for axis in range(3) if axis != panel["axis"]]
        for axis, pair in zip(others, (panel["rect"][:2], panel["rect"][2:]), strict=True):
            planes[axis] |= set(pair)
    mesh = grid(*(_filled(sorted(values), 0.34) for values in planes))
    surfaces = {panel["name"]: faces_where(mesh, lambda x, panel=panel: _inside(x, panel)) for panel in panels}
    return TestMesh(mesh.nodes, mesh.tets, surfaces)


def _filled(planes: list[float], largest: float) -> np.ndarray:
    parts = [np.linspace(a, b, int(np.ceil((b - a) / largest)) + 1) for a, b in pairwise(planes)]
    return np.unique(np.round(np.concatenate(parts), 12))


def _inside(x: np.ndarray, panel: dict[str, Any]) -> np.ndarray:
    axis = panel["axis"]
    others = [a for a in range(3) if a != axis]
    at = np.isclose(x[..., axis], LENGTHS[axis] * panel["side"])
    for a, (low, high) in zip(others, (panel["rect"][:2], panel["rect"][2:]), strict=True):
        at = at & (x[..., a] > low - 1e-9) & (x[..., a] < high + 1e-9)
    return at


def test_contributions_and_ranks_a03() -> None:
    reference = _reference("A03_panel_contributions.json")
    panels, rows = reference["panels"], reference["rows"]
    loads = [
        SurfaceVelocity(panel["name"], Uniform(complex(*panel["v_outward"]), positive="out_of_fluid")) for panel in panels
    ]
    case = case_of(
        _panel_mesh(panels),
        {panel["name"]: Vibrating() for panel in panels},
        loads,
        {row["f"] for row in rows},
        {"ear": tuple(reference["receiver"])},
        damping=lossy(reference["eta"]),
        order=3,
    )
    result = solve(case)
    part = participation(result, "ear")
    assert part.closure < 1e-10
    for row in rows:
        line = int(np.argmin(np.abs(result.frequencies - row["f"])))
        total = complex(*row["p_total"])
        found = result.load_cases[0].contributions[line, 0]
        exact = np.array([complex(*row["contributions"][name]) for name in part.loads])
        assert np.abs(found - exact).max() < 0.005 * abs(total)
        signed = np.array([row["signed_projection"][name] for name in part.loads])
        assert np.abs(part.signed[line] - signed).max() < 0.01
        _same_order(part.signed[line], signed)


def _same_order(found: np.ndarray, exact: np.ndarray) -> None:
    for i in range(len(exact)):
        for j in range(len(exact)):
            if exact[i] - exact[j] > 0.01:
                assert found[i] > found[j]


def test_ranking_of_one_line_follows_the_signed_shares_a03() -> None:
    """The band's ranking is the ordering of summed shares, and its removal level that of the summed pressures."""
    reference = _reference("A03_panel_contributions.json")
    panels = reference["panels"][:3]
    loads = [SurfaceVelocity(p["name"], Uniform(complex(*p["v_outward"]), positive="out_of_fluid")) for p in panels]
    case = case_of(
        _panel_mesh(panels), {p["name"]: Vibrating() for p in panels}, loads, [50.0, 60.0],
        {"ear": (0.85, 0.4, 0.75)}, damping=lossy(0.02), order=3,
    )  # fmt: skip
    result = solve(case)
    ranking = rank(result, ["ear"], (45.0, 65.0), "Z")
    p = result.load_cases[0].contributions[:, 0]
    energy = np.sum(np.real(p * p.sum(axis=1, keepdims=True).conj()), axis=0)
    expected = [part for part in np.argsort(-energy)]
    assert [row.panel for row in ranking.rows] == [panels[i]["name"] for i in expected]
    assert sum(row.share for row in ranking.rows) == 1.0 or abs(ranking.closure) < 1e-12
    first = expected[0]
    without = np.abs(p.sum(axis=1) - p[:, first]) ** 2
    change = 10 * np.log10(without.sum() / (np.abs(p.sum(axis=1)) ** 2).sum())
    assert abs(ranking.rows[0].removal_db - change) < 1e-9
    assert "not treating" in ranking.words


WALLS = {"x0": "x0", "x1": "xL", "y0": "y0", "y1": "yL", "z0": "z0", "z1": "zL"}


def test_one_treated_wall_a05() -> None:
    reference = _reference("A05_one_treated_wall.json")
    rows = reference["rows"]
    walls: dict[str, dict[str, Boundary]] = {"none": {}}
    walls |= {name: {name: Impedance(Given(3 - 1.5j, unit="rho_c"))} for name in WALLS}
    found = {}
    for name, kinds in walls.items():
        case = case_of(
            box(4, 3, 3, LENGTHS), kinds, [monopole(tuple(reference["rs"]))], {row["f"] for row in rows},
            {"ear": tuple(reference["receiver"])}, damping=lossy(reference["eta"]), order=5,
        )  # fmt: skip
        found[name] = solve(case).load_cases[0].contributions[:, 0, 0]
    lines = sorted(row["f"] for row in rows)
    for row in rows:
        line = lines.index(row["f"])
        gains = {}
        for name, label in WALLS.items():
            gains[label] = 20 * np.log10(abs(found["none"][line]) / abs(found[name][line]))
            assert abs(gains[label] - row["treated"][label]["insertion_loss_dB"]) < 0.1, (row["f"], label)
        assert sorted(gains, key=lambda label: -gains[label]) == row["rank_best_first"]
