"""The pump set: its job gives the kinds it names, the air is one body that opens outside, and a design is one case each."""

from __future__ import annotations

from collections.abc import Mapping
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

from murmesh.plugin.check import check_case
from murmesh.plugin.cli import demo_pump_set
from murmesh.plugin.job import Job
from murmesh.solver.case.model import Case
from murmesh.solver.space import discretise
from murmesh.solver.treatment import options

FOLDER = Path(str(files("murmesh.sample_geometry")))


@pytest.fixture(scope="module")
def cases() -> Mapping[str, Case]:
    """Every variant of the demonstration."""
    from murmesh.plugin import probe

    if probe.gmsh_missing():
        pytest.skip(probe.gmsh_missing())
    return dict(demo_pump_set._cases(Job.from_toml(FOLDER / "pump_set.toml"), FOLDER))


def test_every_group_has_its_kind(gmsh_library: None, cases: Mapping[str, Case]) -> None:
    from murmesh.sample_geometry import pump_set

    bare = cases[demo_pump_set.BARE]
    kinds = {surface.name: surface.boundary.kind_name for surface in bare.surfaces}
    assert set(kinds) == {*pump_set.SURFACES, "ground", "outside"}
    assert {name for name, kind in kinds.items() if kind == "vibrating"} == set(pump_set.MACHINE)
    assert kinds["outside"] == "radiating"
    assert {region.name for region in bare.regions} == {pump_set.ENCLOSURE_AIR, pump_set.BEND_AIR, "outside_air"}
    assert not [finding for finding in check_case(bare) if finding.severity in ("error", "warning")]


def test_volumes_are_those_of_the_drawing(gmsh_library: None, cases: Mapping[str, Case]) -> None:
    bare = cases[demo_pump_set.BARE]
    x = bare.mesh.nodes[bare.mesh.tets[:, :4]]
    each = np.abs(np.linalg.det(x[:, 1:] - x[:, :1])) / 6
    of = {region.name: each[bare.mesh.tet_region == i].sum() for i, region in enumerate(bare.regions)}
    machine = 0.66 * 0.32 * 0.08 + 0.32 * 0.22 * 0.28 + 0.22 * 0.16 * 0.20
    assert of["enclosure_air"] == pytest.approx(0.90 * 0.60 * 0.62 - machine)
    assert of["bend_air"] == pytest.approx(0.20 * (0.28 * 0.20 + 0.20 * 0.18))


def test_inside_and_outside_share_their_nodes(gmsh_library: None, cases: Mapping[str, Case]) -> None:
    bare = cases[demo_pump_set.BARE]
    held = {r.name: set(np.unique(bare.mesh.tets[bare.mesh.tet_region == i])) for i, r in enumerate(bare.regions)}
    assert len(held["enclosure_air"] & held["bend_air"]) > 4
    assert len(held["bend_air"] & held["outside_air"]) > 4
    assert not held["enclosure_air"] & held["outside_air"] - set(np.flatnonzero(bare.mesh.nodes[:, 2] < 1e-9))
    [outer] = discretise(bare).envelopes
    assert outer.envelope.ground is not None and outer.envelope.centre[2] == pytest.approx(0.0, abs=1e-9)


def test_linings_change_their_surfaces_alone(gmsh_library: None, cases: Mapping[str, Case]) -> None:
    bare = cases[demo_pump_set.BARE]
    lined = {"enclosure lined": {"enclosure_walls", "enclosure_roof"}, "bend lined": {"bend_walls"}}
    lined["both lined"] = lined["enclosure lined"] | lined["bend lined"]
    for name, panels in lined.items():
        changed = {s.name for s in cases[name].surfaces if s.boundary is not bare.surface(s.name).boundary}
        assert changed == panels
        assert {cases[name].surface(panel).boundary.kind_name for panel in panels} == {"impedance"}
    assert {option.panel for option in options(bare, discretise(bare))} == lined["both lined"]


def test_without_the_enclosure_its_walls_are_air(gmsh_library: None, cases: Mapping[str, Case]) -> None:
    bare, open_air = cases[demo_pump_set.BARE], cases[demo_pump_set.REFERENCE]
    assert {s.name for s in open_air.surfaces} == {"motor", "pump", "base", "ground", "outside"}
    assert len({region.medium for region in open_air.regions}) == 1

    def volume(case: Case) -> float:
        x = case.mesh.nodes[case.mesh.tets[:, :4]]
        return float(np.abs(np.linalg.det(x[:, 1:] - x[:, :1])).sum() / 6)

    shell = 0.98 * 0.68 * 0.66 - 0.90 * 0.60 * 0.62 + 0.28 * 0.28 * 0.42 - 0.20 * (0.28 * 0.20 + 0.20 * 0.18)
    assert volume(open_air) - volume(bare) == pytest.approx(shell, rel=0.05)  # the dome is made of chords


def test_the_script_writes_its_geometry(gmsh_library: None, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    from murmesh.sample_geometry import pump_set

    pump_set.main([str(tmp_path / "pump_set.brep")])
    assert "enclosure_roof" in capsys.readouterr().out
    assert (tmp_path / "pump_set.brep").stat().st_size > 1000
