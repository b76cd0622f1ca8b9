"""What is made of the outside and of gains: VTK files read back by VTK's readers, directivity, radiated power."""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import pytest
import pyvista as pv

import meshes
import solved_box
from cases import case_of
from murmesh.plugin.cli import main
from murmesh.plugin.directivity import pattern
from murmesh.plugin.export import EXPORTS
from murmesh.plugin.pictures import PICTURES, cut_plane, directivity
from murmesh.plugin.pictures.style import texts
from murmesh.plugin.report.page import page
from murmesh.plugin.report.review import Review
from murmesh.plugin.study import Study, study
from murmesh.plugin.summary import outside_facts, trust
from murmesh.solver.case.boundary import Radiating, Vibrating
from murmesh.solver.case.catalogue import Treatment
from murmesh.solver.case.load import SurfaceVelocity
from murmesh.solver.case.motion import Uniform
from murmesh.solver.case.wall import Given
from murmesh.solver.errors import ResultError
from murmesh.solver.result import Result, write_result
from murmesh.solver.sweep import solve


@cache
def _pulsating() -> Result:
    """Half a pulsating sphere on a rigid floor, 400 Hz."""
    kinds = {"inner": Vibrating(), "outer": Radiating(ground="rigid")}
    case = case_of(
        meshes.shell(2, (0.25, 0.3), half=True), kinds, [SurfaceVelocity("inner", Uniform(0.01 + 0j))], [400.0],
        {"far": (0.6, 0.0, 0.8)}, order=3, field_frequencies=np.array([400.0]),
    )  # fmt: skip
    return solve(case)


def test_the_outside_is_read_back_with_levels_that_fall_with_distance(tmp_path: Path) -> None:
    path = EXPORTS["outside_vtm"].make(_pulsating(), tmp_path / "outside.vtm")
    found = pv.read(path)
    assert found.keys() == ["surface/outer", "air/outer", "far/outer"]
    air = found["air/outer"]
    r = np.linalg.norm(air.points, axis=1)
    beyond = (r > 0.35) & (air.points[:, 2] > 0)
    assert np.isnan(air["level_db"][r < 0.2]).all() and np.isnan(air["level_db"][air.points[:, 2] < -0.02]).all()
    near = found["surface/outer"]["level_db"].mean()
    assert np.abs(air["level_db"][beyond] + 20 * np.log10(r[beyond] / 0.3) - near).max() < 0.2
    assert np.abs(found["far/outer"]["directivity_index_db"] - 10 * np.log10(2)).max() < 0.05  # half space: 3 dB
    assert np.abs(found["far/outer"]["level_db"] - near + 20 * np.log10(1 / 0.3)).max() < 0.2


def test_a_cut_shows_the_outside_as_far_as_its_receivers() -> None:
    """A pulsating sphere falls by 6 dB per doubling of the distance, in the model and around it."""
    [cut] = cut_plane.cuts_of(_pulsating(), cut_plane.default_planes(_pulsating().case)[1:2], 400.0, "")
    around, inside = cut.layers
    assert (cut.low < [-0.3, 0.0]).all() and (cut.high > [0.6, 0.8]).all() and np.isnan(inside.columns).any()
    u, v = (np.linspace(around.low[k], around.high[k], 2 * around.pressure.shape[1 - k] + 1)[1::2] for k in (0, 1))
    r = np.hypot(*np.meshgrid(u, v)).ravel()
    p = np.abs(around.columns[:, 0])
    assert np.isnan(p[(r < 0.22)]).all()
    far = (r > 0.45) & np.isfinite(p)
    assert np.ptp(20 * np.log10(p[far] * r[far])) < 0.3


def test_directivity_is_drawn_with_power_and_index() -> None:
    [far] = pattern(_pulsating(), 400.0)
    assert far.power == pytest.approx(_pulsating().load_cases[0].absorbed[0, -1], rel=1e-6)
    assert far.normal is not None and (far.directions @ far.normal > -1e-9).all() and far.radius.max() == 1.0
    words = " ".join(texts(directivity.figure(_pulsating())))
    assert "dB re 1 pW radiated, directivity index up to +3.0 dB" in words and "x-z plane" in words


def test_products_of_the_outside_are_offered_where_something_radiates(tmp_path: Path) -> None:
    assert "directivity" in [p.name for p in PICTURES.of(_pulsating())]
    assert "directivity" not in [p.name for p in PICTURES.of(solved_box.result())]
    with pytest.raises(ResultError, match="nothing radiates in this case, so it has no far field"):
        directivity.figure(solved_box.result())
    write_result(_pulsating(), tmp_path / "r.h5")
    for command, option, made in (("draw", "--picture", "directivity.png"), ("export", "--format", "outside.vtm")):
        name = "directivity" if command == "draw" else "outside_vtm"
        assert main([command, str(tmp_path / "r.h5"), str(tmp_path / "out"), option, name]) == 0
        assert (tmp_path / "out" / made).is_file()


def test_what_the_infinite_elements_rest_on_is_said() -> None:
    [(name, words)] = outside_facts(_pulsating())
    envelope = _pulsating().space.envelopes[0].envelope
    assert name == "infinite elements on outer" and f"{envelope.radial} radial functions, k a up to 2.2" in words
    condition = float(words.split()[-1])
    assert 1.0 < condition < 1e3 and words in trust(_pulsating())
    assert outside_facts(solved_box.result()) == []


def test_a_page_of_a_case_that_radiates() -> None:
    text = page(Review(_pulsating(), target=60.0))
    assert "radiated power [re 1 pW]" in text and "no level at a receiver" in text
    assert "infinite elements on outer" in text and "radiated/outer" in text


@cache
def _study() -> Study:
    case = solved_box.case(sheet=False)
    foam = Treatment("foam", 1.5, 12.0, 0.05, wall=Given(2.0 - 1.0j), panels=("x1", "y0"))
    cut = Treatment("mat", 4.0, 3.0, velocity_cut=6.0, panels=("x0",))
    sweep = case.sweep.with_(frequencies=np.arange(60.0, 240.1, 10.0), method="reduced", field_frequencies=np.empty(0))
    return study(solve(case.with_(catalogue=(foam, cut), sweep=sweep)), verify=False)


def test_gains_are_read_back_as_arrays_on_the_panels(tmp_path: Path) -> None:
    found = _study()
    skin = pv.read(EXPORTS["gains_vtp"].make(found, tmp_path / "gains.vtp"))
    assert {"gain_quieten_db", "gain_foam_db", "gain_mat_db", "chosen"} == set(skin.cell_data)
    for measure in found.treat:
        values = skin[f"gain_{measure.treatment}_db"]
        assert np.isclose(values, measure.gain, atol=1e-9).any()
    at_x1 = np.abs(skin.cell_centers().points[:, 0] - skin.bounds[1]) < 1e-6
    gain = next(m.gain for m in found.treat if m.name == "foam on x1")
    assert np.allclose(skin["gain_foam_db"][at_x1], gain) and np.isnan(skin["gain_mat_db"][at_x1]).all()
    treated = {option.panel for option in found.used(found.best)}
    assert set(np.unique(skin["chosen"])) <= {0.0, 1.0} and bool(skin["chosen"][at_x1][0]) == ("x1" in treated)
    assert "positive is quieter" in str(skin.field_data["units"][0])
