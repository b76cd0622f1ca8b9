"""Every picture: a PNG of the right size with all its words on it, none cut off or run over; and the numbers drawn."""

from __future__ import annotations

import itertools
import sys
from collections.abc import Callable
from dataclasses import replace
from functools import cache
from pathlib import Path

import matplotlib.colors
import matplotlib.image
import numpy as np
import pytest
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle
from matplotlib.text import Text

import solved_box
from murmesh.plugin import probe
from murmesh.plugin.fields import field_levels, kept_line
from murmesh.plugin.pictures import PICTURES, cut_plane, mode_shape
from murmesh.plugin.pictures.cut_plane import Plane, crossings
from murmesh.plugin.pictures.labels import spread
from murmesh.plugin.pictures.scene import Outline, corner_views, panel_pixels, triangle_normals
from murmesh.plugin.pictures.style import LEVEL_MAP, level_limits, look, texts
from murmesh.plugin.products import Product
from murmesh.plugin.sampling import sample_skin
from murmesh.solver.contribution import QUIETENING, participation, rank
from murmesh.solver.errors import MissingLibraryError, ResultError
from murmesh.solver.modes import Modes, modes
from murmesh.solver.result import Result

F = 120.0
FROM_RESULT = [picture for picture in PICTURES if picture.source == "result"]
RANKINGS = ("contribution_bars", "panel_colours", "panel_map")


@pytest.fixture(scope="module")
def result() -> Result:
    return solved_box.result()


@pytest.fixture(scope="module")
def found_modes() -> Modes:
    return modes(solved_box.case(), 2, 200.0)


def _needs(picture: Product, request: pytest.FixtureRequest) -> None:
    if picture.renders:
        request.getfixturevalue("rendering")


def _figure(picture: Product, *args: object, **options: object) -> Figure:
    build: Callable[..., Figure] = sys.modules[picture.make.__module__].figure
    with look():
        return build(*args, **options)


def _words(figure: Figure) -> str:
    return "\n".join(texts(figure))


@cache
def _default(name: str, load_case: str) -> Figure:
    """A picture of the box as it comes, drawn once for several tests."""
    return _figure(PICTURES[name], solved_box.result(), load_case=load_case)


# ---------------------------------------------------------------------------------------------------------------------
# all pictures


@pytest.mark.parametrize("picture", FROM_RESULT, ids=lambda picture: picture.name)
def test_a_picture_is_a_png_of_1400_pixels_with_something_on_it(
    picture: Product, tmp_path: Path, result: Result, request: pytest.FixtureRequest
) -> None:
    _needs(picture, request)
    path = picture.make(result, tmp_path / f"a{picture.suffix}")
    image = matplotlib.image.imread(path)
    assert image.shape[1] == 1400 and 400 < image.shape[0] < 1600
    assert len(np.unique(image[::7, ::7].reshape(-1, image.shape[2]), axis=0)) > 20
    assert list(tmp_path.iterdir()) == [path]


@pytest.mark.parametrize("load_case", ["run", "idle"])
@pytest.mark.parametrize("picture", FROM_RESULT, ids=lambda picture: picture.name)
def test_a_picture_says_what_it_shows(
    picture: Product, load_case: str, result: Result, request: pytest.FixtureRequest
) -> None:
    _needs(picture, request)
    words = _words(_default(picture.name, load_case))
    assert "re 20 µPa" in words and "rms" in words and "exp(+iωt)" in words and "complex peak" in words
    assert f"load case ‘{load_case}’" in words and result.case.checksum[:8] in words
    assert ("A-weighted" in words) if "weighting" in picture.options else ("no frequency weighting" in words)
    assert (f"{kept_line(result, None, load_case):.0f} Hz" if "frequency" in picture.options else "60–240 Hz") in words
    if picture.name in ("surface_map", "cut_plane", "panel_map"):
        assert ("per Hz" in words) == (load_case == "run")
    if picture.name in RANKINGS:
        assert QUIETENING in words.replace("\n", " ")


@pytest.mark.parametrize("load_case", ["run", "idle"])
@pytest.mark.parametrize("picture", FROM_RESULT, ids=lambda picture: picture.name)
def test_words_are_whole_and_do_not_overlap(picture: Product, load_case: str, request: pytest.FixtureRequest) -> None:
    _needs(picture, request)
    _check_words(_default(picture.name, load_case))


def _check_words(figure: Figure) -> None:
    figure.draw_without_rendering()
    boxes = [(text.get_text(), Text.get_window_extent(text)) for text in _drawn(figure)]
    assert len(boxes) > 5
    for text, box in boxes:
        assert box.x0 >= 0 and box.x1 <= figure.bbox.width, f"'{text}' is cut off"
        assert box.y0 >= 0 and box.y1 <= figure.bbox.height, f"'{text}' is cut off"
    for (text, box), (other, rival) in itertools.combinations(boxes, 2):
        across = min(box.x1, rival.x1) - max(box.x0, rival.x0)
        along = min(box.y1, rival.y1) - max(box.y0, rival.y0)
        assert across < 2 or along < 2, f"'{text}' runs into '{other}'"


def _drawn(figure: Figure) -> list[Text]:
    """All texts but the labels of ticks that are off the axis, or whose axes draw none."""
    hidden: set[Text] = set()
    for axes in figure.axes:
        for axis in (axes.xaxis, axes.yaxis):
            low, high = sorted(axis.get_view_interval())
            slack = 1e-9 * (high - low)
            ticks = [*axis.get_major_ticks(), *axis.get_minor_ticks()]
            off = [t for t in ticks if not axes.axison or not low - slack <= t.get_loc() <= high + slack]
            hidden |= {label for tick in off for label in (tick.label1, tick.label2)}
    return [t for t in figure.findobj(Text) if t.get_visible() and t.get_text().strip() and t not in hidden]


def test_the_check_of_words_can_fail() -> None:
    with look():
        figure = Figure(figsize=(4, 2))
        for word in range(7):
            figure.text(0.1, 0.1 + 0.1 * word, f"word {word}")
        _check_words(figure)
        figure.text(0.12, 0.12, "over it")
        with pytest.raises(AssertionError, match="runs into"):
            _check_words(figure)
        figure.texts[-1].set_position((0.99, 0.9))
        with pytest.raises(AssertionError, match="is cut off"):
            _check_words(figure)


@pytest.mark.parametrize("name", ["cut_plane", "surface_map"])
def test_given_limits_are_kept(name: str, result: Result, request: pytest.FixtureRequest) -> None:
    _needs(PICTURES[name], request)
    figure = _figure(PICTURES[name], result, limits=(40.0, 80.0))
    bar = figure.axes[-1]
    assert bar.get_ylim() == (40.0, 80.0)


def test_default_limits_are_40_db_below_the_next_5_db() -> None:
    assert level_limits(np.array([61.2, 87.1, -np.inf, np.nan])) == (50.0, 90.0)
    assert level_limits(np.array([85.0])) == (45.0, 85.0)
    assert level_limits(np.array([85.0]), (20.0, 30.0)) == (20.0, 30.0)


def test_an_unknown_picture_is_said() -> None:
    with pytest.raises(ResultError, match="did you mean 'cut_plane'"):
        PICTURES["cutplane"]


def test_options_pick_what_a_picture_takes() -> None:
    given = {"frequency": 95.0, "band": (80.0, 160.0), "limits": None}
    assert PICTURES["surface_map"].taking(**given) == {"frequency": 95.0}
    assert PICTURES["contribution_bars"].taking(**given) == {"band": (80.0, 160.0)}


def test_without_rendering_a_3d_picture_says_the_cure(tmp_path: Path, result: Result, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(probe, "rendering_missing", lambda: "no picture can be drawn: try apt-get")
    assert {p.name for p in PICTURES if p.renders} == {
        "gain_colours",
        "mode_shape",
        "panel_colours",
        "surface_map",
        "surface_phase",
    }
    for picture in (*FROM_RESULT, PICTURES["surface_phase"]):
        if picture.renders:
            with pytest.raises(MissingLibraryError, match="apt-get"):
                picture.make(result, tmp_path / f"a{picture.suffix}")


def test_a_result_without_fields_is_said(tmp_path: Path, result: Result) -> None:
    sweep = replace(result.case.sweep, field_frequencies=np.empty(0))
    bare = replace(result, case=replace(result.case, sweep=sweep))
    with pytest.raises(ResultError, match="keeps no field"):
        cut_plane.draw(bare, tmp_path / "a.png")


# ---------------------------------------------------------------------------------------------------------------------
# charts


def test_bars_are_the_ranking(result: Result) -> None:
    ranking = rank(result, ["left_ear"], (80.0, 200.0), "Z", "run")
    figure = _figure(PICTURES["contribution_bars"], result, ["left_ear"], (80.0, 200.0), "Z", "run")
    bars = [patch for patch in figure.axes[0].patches if isinstance(patch, Rectangle)]
    np.testing.assert_allclose([bar.get_width() for bar in bars], [100 * row.share for row in ranking.rows])
    assert [bool(bar.get_hatch()) for bar in bars] == [row.share < 0 for row in ranking.rows]
    words = _words(figure)
    assert all(row.panel in words and f"{row.own_db:.1f}" in words for row in ranking.rows)
    assert "80–200 Hz" in words and "no frequency weighting" in words and "dB(A)" not in words
    assert "add up to 100.0 %" in words


def test_a_density_is_a_line_and_tones_are_stems(result: Result) -> None:
    density = _figure(PICTURES["receiver_spectrum"], result, ["right_ear"], "run", "Z").axes[0]
    tones = _figure(PICTURES["receiver_spectrum"], result, ["right_ear"], "idle", "Z").axes[0]
    assert not density.collections and len(tones.collections[0].get_segments()) == len(result.frequencies)  # type: ignore[attr-defined]
    assert "per Hz" in density.get_ylabel() and "per Hz" not in tones.get_ylabel()
    square = result.mean_square("right_ear", "run")
    np.testing.assert_allclose(density.lines[0].get_ydata(), 10 * np.log10(square / 4e-10))  # type: ignore[arg-type]


def test_partial_bands_are_hatched_and_said(result: Result) -> None:
    figure = _figure(PICTURES["receiver_spectrum"], result, ["right_ear"], "run")
    bars = [bar for bar in figure.axes[1].patches if isinstance(bar, Rectangle)]
    assert bars[0].get_hatch() and bars[-1].get_hatch() and not bars[2].get_hatch()
    assert "Hatched bands lie only partly inside the sweep" in _words(figure)
    assert "Hatched" not in _words(_figure(PICTURES["receiver_spectrum"], result, ["right_ear"], "idle"))


def test_a_measured_spectrum_is_laid_over_with_the_same_weighting(result: Result) -> None:
    plain, weighted = (
        _figure(PICTURES["receiver_spectrum"], result, ["left_ear"], "run", w).axes[0].lines[-1] for w in ("Z", "A")
    )
    assert plain.get_label() == "measured"
    np.testing.assert_allclose(plain.get_ydata(), [70.0, 90.0, 80.0])  # type: ignore[arg-type]
    # E01: A-weighting at 63 Hz is -26.2 dB, and falls towards 60 Hz
    assert -27.5 < np.asarray(weighted.get_ydata())[0] - 70.0 < -26.2
    assert "measured" not in _words(_figure(PICTURES["receiver_spectrum"], result, ["right_ear"]))


def test_the_map_carries_the_sign_and_level_of_each_share(result: Result) -> None:
    figure = _figure(PICTURES["panel_map"], result, ["right_ear"], "run", "Z", (20.0, 100.0))
    axes = figure.axes[0]
    drawn = np.asarray(axes.collections[0].get_array()).reshape(3, -1)
    order = [label.get_text() for label in axes.get_yticklabels()]
    part = participation(result, "right_ear", "run")
    shares = part.shares[:, [part.loads.index(name) for name in order]].T
    expected = np.sign(shares) * np.clip(10 * np.log10(np.abs(shares) / 4e-10) - 20.0, 0, 80)
    np.testing.assert_allclose(drawn, expected, atol=1e-9)
    assert np.any(drawn < 0) and np.any(drawn > 0)


def test_of_tones_only_those_that_sound_are_drawn(result: Result) -> None:
    quiet = _with_tones(result, [2, 5])
    figure = _figure(PICTURES["panel_map"], quiet, ["right_ear"], "idle", "Z")
    assert [label.get_text() for label in figure.axes[0].get_xticklabels()] == ["100", "160"]
    stems = _figure(PICTURES["receiver_spectrum"], quiet, ["right_ear"], "idle").axes[0].collections[0]
    assert len(stems.get_segments()) == 2  # type: ignore[attr-defined]
    with pytest.raises(ResultError, match="no tone of load case 'idle' sounds on a line of the sweep"):
        _figure(PICTURES["panel_map"], _with_tones(result, []), ["right_ear"], "idle", "Z")


def _with_tones(result: Result, lines: list[int]) -> Result:
    """The same result with sound of the load case "idle" on some lines only."""
    run, idle = result.load_cases
    kept = np.isin(np.arange(len(result.frequencies)), lines)[:, None, None]
    return replace(result, load_cases=(run, replace(idle, contributions=idle.contributions * kept)))


def test_a_case_without_receivers_is_said(tmp_path: Path, result: Result) -> None:
    deaf = replace(result, case=replace(result.case, receivers=()))
    for name in ("panel_map", "contribution_bars", "receiver_spectrum"):
        with pytest.raises(ResultError, match="has no receiver"):
            PICTURES[name].make(deaf, tmp_path / "a.png")


# ---------------------------------------------------------------------------------------------------------------------
# cuts


def test_a_cut_of_the_box_is_a_closed_rectangle(result: Result) -> None:
    skin = sample_skin(solved_box.result(sheet=False).space, 1)
    segments = crossings(skin, np.array([0.3, 0.0, 0.0]), np.array([1.0, 0.0, 0.0]))
    assert np.linalg.norm(segments[:, 1] - segments[:, 0], axis=1).sum() == pytest.approx(2 * (0.8 + 0.6))
    np.testing.assert_allclose(segments[..., 0], 0.3)
    # the sheet at x = 0.5 is met once from either side
    sheet = crossings(sample_skin(result.space, 1), np.array([0.0, 0.2, 0.0]), np.array([0.0, 1.0, 0.0]))
    length = np.linalg.norm(sheet[:, 1] - sheet[:, 0], axis=1).sum()
    assert length == pytest.approx(2 * (1.0 + 0.6) + 2 * 0.6)


@pytest.mark.parametrize("normal", [(1.0, 0, 0), (0, 2.0, 0), (0, 0, -1.0), (1.0, 1.0, 0.5)])
def test_a_plane_maps_there_and_back(normal: tuple[float, float, float]) -> None:
    plane = Plane.of((0.1, 0.2, 0.3), normal)
    flat = np.random.default_rng(0).normal(size=(5, 2))
    points = plane.place(flat)
    np.testing.assert_allclose(plane.flat(points), flat, atol=1e-12)
    np.testing.assert_allclose((points - [0.1, 0.2, 0.3]) @ np.array(normal), 0.0, atol=1e-12)


def test_a_cut_shows_the_field_itself(result: Result) -> None:
    plane = ((0.3, 0.4, 0.3), (0.0, 0.0, 1.0))
    figure = _figure(PICTURES["cut_plane"], result, F, "run", [plane])
    image = figure.axes[0].images[0]
    levels = np.asarray(image.get_array())
    left, right, bottom, top = image.get_extent()
    assert (left, right, bottom, top) == pytest.approx((0.0, 1.0, 0.0, 0.8))
    row, column = 30, 200
    x = left + (column + 0.5) / levels.shape[1] * (right - left)
    y = bottom + (row + 0.5) / levels.shape[0] * (top - bottom)
    here = field_levels(result, result.pressure_at(np.array([[x, y, 0.3]]), F, "run"), "run")
    assert levels[row, column] == pytest.approx(here[0], abs=1e-3)
    assert "z = 0.3 m" in _words(figure)


@pytest.mark.parametrize("towards", [1.0, -1.0])
def test_a_cut_in_a_sheet_shows_the_side_it_looks_to(result: Result, towards: float) -> None:
    figure = _figure(PICTURES["cut_plane"], result, F, "run", [((0.5, 0.2, 0.3), (towards, 0.0, 0.0))])
    image = figure.axes[0].images[0]
    levels = np.asarray(image.get_array())
    u, v = (0.5 + np.arange(0, n, 7) for n in levels.shape[::-1])
    y, z = np.meshgrid(u / levels.shape[1] * 0.8, v / levels.shape[0] * 0.6)
    points = np.stack([np.full(y.size, 0.5 + 1e-7 * towards), y.ravel(), z.ravel()], axis=1)
    expected = field_levels(result, result.pressure_at(points, F, "run"), "run").reshape(y.shape)
    np.testing.assert_allclose(levels[::7, ::7], expected, atol=1e-3)


def test_a_cut_beside_the_model_is_said(result: Result) -> None:
    with pytest.raises(ResultError, match=r"x = 4 m misses the fluid"):
        _figure(PICTURES["cut_plane"], result, F, "run", [((4.0, 0, 0), (1.0, 0, 0))])


def test_a_cut_without_direction_is_said() -> None:
    with pytest.raises(ResultError, match="a cut needs a normal"):
        Plane.of((0, 0, 0), (0, 0, 0))


# ---------------------------------------------------------------------------------------------------------------------
# three dimensions


def test_two_corner_views_show_every_wall_once(result: Result) -> None:
    skin = sample_skin(result.space, 1)
    first, second = corner_views(skin.cloud.points, 1.0)
    shown = [triangle_normals(skin) @ view.towards < 0 for view in (first, second)]
    assert np.all(shown[0] ^ shown[1])
    inside = np.abs(first.project(skin.cloud.points)) <= [first.half_width, first.half_height]
    assert inside.all()


def test_the_outline_of_a_box_is_its_twelve_edges() -> None:
    skin = sample_skin(solved_box.result(sheet=False).space, 3)
    edges = Outline.of(skin).edges
    length = np.linalg.norm(np.diff(skin.cloud.points[edges], axis=1), axis=2).sum()
    assert length == pytest.approx(4 * (1.0 + 0.8 + 0.6))


def test_surface_colours_are_those_of_the_level(rendering: None) -> None:
    """A uniform pressure of 1 Pa rms per hertz is 94 dB: every wall has that colour, whichever way it looks."""
    even = solved_box.uniform_field(solved_box.result(sheet=False), np.sqrt(2.0) * np.sqrt(2.0))
    figure = _figure(PICTURES["surface_map"], even, F, "run", (60.0, 100.0))
    wanted = matplotlib.colormaps[LEVEL_MAP]((93.98 - 60.0) / 40.0)[:3]
    for axes in figure.axes[:2]:
        image = np.asarray(axes.images[0].get_array()).reshape(-1, 3)
        body = image[np.abs(image - 255.0).max(axis=1) > 30]
        near = np.abs(body / 255.0 - wanted).max(axis=1) < 0.02
        assert len(body) > 20_000 and near.mean() > 0.9


def test_panels_are_seen_where_they_are(rendering: None) -> None:
    result = solved_box.result(sheet=False)
    skin = sample_skin(result.space, 1)
    seen = []
    for view in corner_views(skin.cloud.points, 1.0):
        pixels = panel_pixels(view, skin, Outline.of(skin), (300, 300))
        names = [solved_box.WALLS[k] for k in np.unique(pixels) if k >= 0]
        assert set(np.unique(pixels)) <= {-2, *range(6)}
        seen.append(set(names))
    assert seen == [{"x1", "y1", "z0"}, {"x0", "y0", "z1"}]


def test_panel_names_stand_beside_the_model(rendering: None, result: Result) -> None:
    words = _words(_figure(PICTURES["panel_colours"], result, ["left_ear"], (80.0, 200.0), "A", "run"))
    for row in rank(result, ["left_ear"], (80.0, 200.0), "A", "run").rows:
        assert f"{row.panel}\n{100 * row.share:+.1f} %".replace("-", "−") in words
    assert "Grey surfaces carry no load" in words


def test_mode_shapes_are_drawn_with_their_frequency(rendering: None, found_modes: Modes, tmp_path: Path) -> None:
    paths = mode_shape.draw_all(found_modes, tmp_path / "modes")
    assert [path.name for path in paths] == ["mode_01.png", "mode_02.png"]
    figure = _figure(PICTURES["mode_shape"], found_modes, 1)
    assert f"{found_modes.frequencies[1]:.4g} Hz" in _words(figure)
    _check_words(figure)


def test_a_mode_that_was_not_found_is_said(found_modes: Modes) -> None:
    with pytest.raises(ResultError, match=r"mode 7 is asked of 2; give 0 \.\. 1"):
        _figure(PICTURES["mode_shape"], found_modes, 7)


def test_labels_keep_their_distance_and_their_order() -> None:
    wanted = np.array([0.9, 0.88, 0.3, 0.29, 0.28, -1.0])
    placed = spread(wanted, 0.2, 1.0)
    assert np.all(-np.diff(placed) >= 0.2 - 1e-12) and placed.max() <= 1.0 and placed.min() >= -1.0 - 1e-12
    far_apart = np.array([0.8, 0.0, -0.5])
    np.testing.assert_allclose(spread(far_apart, 0.2, 1.0), far_apart)
