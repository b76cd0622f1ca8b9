"""The review page: every section answers, nothing reaches outside, nothing a user names becomes markup, the script runs."""

from __future__ import annotations

import base64
import html.parser
import json
import re
from collections.abc import Callable
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import matplotlib.image
import numpy as np
import pytest

import solved_box
from murmesh.plugin.describe import signed
from murmesh.plugin.report import html as markup
from murmesh.plugin.report import maps, treatments, validity
from murmesh.plugin.report.page import SECTIONS, page, write_page
from murmesh.plugin.report.review import APART, Review, verdict, worst_lines
from murmesh.plugin.report.viewer import View, tree
from murmesh.plugin.study import study
from murmesh.plugin.study import tree as tree_of
from murmesh.plugin.summary import Bars, levels
from murmesh.solver.case.catalogue import Limits, Treatment
from murmesh.solver.case.medium import LossFactor, NoDamping
from murmesh.solver.case.wall import Given
from murmesh.solver.errors import ResultError
from murmesh.solver.levels import A_weighting, schroeder_frequency
from murmesh.solver.result import Result
from murmesh.solver.sweep import solve

Browser = Callable[..., tuple[str, str]]
EVIL = "</script><img src=x onerror=alert(1)>&\"'"


@pytest.fixture(scope="module")
def result() -> Result:
    return solved_box.result()


@cache
def _page(target: float | None = 60.0) -> str:
    return page(Review(solved_box.result(), target=target))


class _Reader(html.parser.HTMLParser):
    """Checks that elements are closed in order, and collects addresses."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.addresses: list[str] = []
        self.elements: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append(tag)
        self.addresses += [value or "" for name, value in attrs if name in ("src", "href", "action", "srcset", "data")]
        assert not [name for name, _ in attrs if name.startswith("on")], "no script in an attribute"
        if tag not in ("img", "meta", "br", "input"):
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag


def _read(text: str) -> _Reader:
    reader = _Reader()
    reader.feed(text)
    assert not reader.open
    return reader


def test_the_page_reaches_for_nothing_outside_itself(rendering: None) -> None:
    text = _page()
    reader = _read(text)
    assert reader.addresses and all(a.startswith(("data:image/png;base64,", "#")) for a in reader.addresses)
    assert not re.search(r"https?:|//[a-z]|@import|url\(|<link|<iframe|fetch\(|XMLHttpRequest", _without_data(text))
    assert 'http-equiv="Content-Security-Policy" content="default-src &#x27;none&#x27;' in text


def _without_data(text: str) -> str:
    text = re.sub(r"data:image/png;base64,[A-Za-z0-9+/=]+", "", text)
    return re.sub(r'<script type="application/json".*?</script>', "", text).replace("// ", "")


def test_every_section_stands_in_the_page(rendering: None) -> None:
    text = _page()
    for module in SECTIONS:
        assert f"<h2>{module.TITLE}</h2>" in text
    for words in (
        "at most 60 dB(A)", "NOT met", "exp(+iωt)", "Schroeder", "largest residual", "power balance, run", "Not computed.",
        "not treating it", "Predictions are not measurements", "elements per wavelength", "error bar of the mesh", "re 20 µPa",
    ):  # fmt: skip
        assert words in text, words
    assert len(re.findall("<img ", text)) == 4 + 2 * len(worst_lines(solved_box.result()))


def test_names_of_users_stay_text(rendering: None, result: Result) -> None:
    case = result.case
    receivers = (replace(case.receivers[0], name=EVIL), *case.receivers[1:])
    surfaces = (
        replace(case.surfaces[0], name="x0"),
        *(s.with_(name=EVIL) if s.name == "y0" else s for s in case.surfaces[1:]),
    )
    evil = replace(result, case=case.with_(title=EVIL, receivers=receivers, surfaces=surfaces))
    text = page(Review(evil, question=EVIL))
    reader = _read(text)
    assert EVIL not in text and "onerror=alert(1)>" not in text and "&lt;/script&gt;&lt;img" in text
    assert reader.elements.count("script") == 2 and reader.elements.count("title") == 1


def test_markup_escapes_what_is_not_markup() -> None:
    assert markup.tag("p", "a<b", markup.tag("br"), class_='"x') == '<p class="&quot;x">a&lt;b<br></p>'
    assert "</script>" not in markup.data("d", {"a": "</script>"})[:-9]


def test_the_worst_lines_are_loud_and_apart(result: Result) -> None:
    lines = worst_lines(result)
    assert set(lines) <= set(solved_box.KEPT) and len(lines) == 2
    heard = [sum(result.mean_square(r.name)[list(result.frequencies).index(f)] for r in result.case.receivers) for f in lines]
    weight = [10 ** (float(A_weighting(f)) / 10) for f in lines]
    assert heard[0] * weight[0] > heard[1] * weight[1]
    assert max(lines) / min(lines) >= APART
    assert worst_lines(result, count=1) == lines[:1]


def test_without_a_field_the_maps_say_so(result: Result) -> None:
    case = result.case.with_(sweep=result.case.sweep.with_(field_frequencies=np.empty(0)))
    bare = replace(result, case=case, load_cases=tuple(replace(h, fields=h.fields[:0]) for h in result.load_cases))
    assert "Not computed." in maps.section(Review(bare))


@pytest.mark.parametrize(
    ("gap", "bar", "words"),
    [(2.0, 0.1, "NOT met: 2.0 dB above"), (-2.0, 0.1, "met: 2.0 dB below"), (0.3, 0.5, "undecided"), (-0.3, 0.5, "undecided")],
)
def test_a_verdict_knows_its_error_bar(result: Result, gap: float, bar: float, words: str) -> None:
    item = levels(result, "left_ear")
    none = np.zeros(len(item.bands))
    judged = replace(item, bars=Bars(bar, none, item.overall, none))
    assert verdict(judged, item.overall - gap).startswith(words)


def test_a_target_must_be_a_level(result: Result) -> None:
    with pytest.raises(ResultError, match="give dB"):
        Review(result, target=float("nan"))
    with pytest.raises(ResultError, match="did you mean 'run'"):
        Review(result, load_case="runn")


def test_the_schroeder_frequency_comes_from_the_stated_losses(result: Result) -> None:
    """eta = 2.2 / (f T60): the box of 0.48 m3 with eta = 0.05 has T60 = 44 / f s, so f = (2000^2 * 44 / V)^(1/3)."""
    exact = (2000.0**2 * 44.0 / 0.48) ** (1 / 3)
    assert exact > 240
    assert "above the sweep" in validity.schroeder_words(result.case)
    sweep = result.case.sweep.with_(frequencies=np.arange(60.0, 1000.0, 1.0), field_frequencies=np.empty(0))
    words = validity.schroeder_words(result.case.with_(sweep=sweep))
    found = float(re.search(r"([\d.]+) Hz from", words).group(1))  # type: ignore[union-attr]
    assert exact <= found <= exact + 1.1
    assert found == pytest.approx(schroeder_frequency(44 / found, 0.48), rel=5e-3)
    region = result.case.regions[0].with_(damping=NoDamping())
    assert "not known" in validity.schroeder_words(result.case.with_(regions=(region,)))
    assert isinstance(result.case.regions[0].damping, LossFactor)


def test_the_model_in_the_page_holds_the_levels_of_a_uniform_field(result: Result) -> None:
    uniform = solved_box.uniform_field(result, 2.0 + 0j)
    view = View.of(uniform, [120.0])
    held = tree(view, "dB")
    level = np.frombuffer(base64.b64decode(held["levels"][0]), "<i2") / 100  # type: ignore[index]
    expected = 10 * np.log10(0.5 * 4.0 / 2.0 / 2e-5**2)  # a density of 2 Hz
    assert np.allclose(level, expected, atol=0.006)
    triangles = np.frombuffer(base64.b64decode(str(held["triangles"])), "<i4").reshape(-1, 3)
    points = np.frombuffer(base64.b64decode(str(held["points"])), "<f4").reshape(-1, 3)
    assert triangles.max() == len(points) - 1 and len(level) == len(triangles) == len(view.skin.surface)
    assert np.allclose(points.max(axis=0), [0.5, 0.4, 0.3], atol=1e-6)


@cache
def _treated() -> tuple[Result, dict[str, Any]]:
    """The box with a foam that may go on two walls, one moves and one is hard, and a mat on a third."""
    case = solved_box.case(sheet=False)
    foam = Treatment("foam", 1.5, 16.0, 0.05, wall=Given(2.0 - 1.0j), panels=("x1", "y0"))
    cut = Treatment("mat", 4.0, 0.0, velocity_cut=6.0, panels=("x0",))
    lines = np.arange(60.0, 240.1, 5.0)
    sweep = case.sweep.with_(frequencies=lines, method="reduced", field_frequencies=np.empty(0))
    result = solve(case.with_(catalogue=(foam, cut), sweep=sweep))
    return result, tree_of(study(result, limits=Limits(cost=10.0, panels=2), samples=5))


def test_a_study_stands_in_the_page(rendering: None) -> None:
    result, found = _treated()
    text = page(Review(result), found)
    best = found["choices"][0]
    assert found["words"] in text and " + ".join(best["measures"]) in text
    assert f"{signed(best['verified_gain_db'])} (off by 0.00" in text
    for item in found["treat"]:
        assert f"<td>{item['measure']}</td>" in text
    gets = ["LOUDER" if item["gain_db"] < -0.005 else "quieter" for item in (*found["treat"], *found["quieten"])]
    assert text.count("<td>LOUDER</td>") == gets.count("LOUDER")
    assert "In 5 draws of what is not known exactly" in text and "80 % of the draws" in text
    unsampled = treatments.section(Review(result), tree_of(study(result, samples=0, verify=False)))
    assert "was not sampled" in unsampled and "80 % of the draws" not in unsampled
    assert "cost 10.0" in text and "Not computed." not in treatments.section(Review(result), found)


def test_a_study_must_be_of_the_result(tmp_path: Path, result: Result) -> None:
    own, found = _treated()
    path = tmp_path / "study.json"
    path.write_text(json.dumps(found))
    assert treatments.read_study(path, own) == json.loads(json.dumps(found))
    with pytest.raises(ResultError, match="of another case"):
        treatments.read_study(path, result)
    changed = replace(own, case=own.case.with_(catalogue=own.case.catalogue[:1]))
    accepted = treatments.read_study(path, changed)
    words = treatments.section(Review(changed), accepted)
    assert "another catalogue" in words and "<h3>Catalogue</h3>" not in words
    louder = replace(own, case=own.case.with_(load_cases=()))
    with pytest.raises(ResultError, match="mesh, surfaces, media, loads"):
        treatments.read_study(path, louder)
    path.write_text("[1]")
    with pytest.raises(ResultError, match="no study"):
        treatments.read_study(path, own)
    with pytest.raises(ResultError, match="lacks 'words'"):
        treatments.section(Review(own), {key: value for key, value in found.items() if key != "words"})


# ---------------------------------------------------------------------------------------------------------------------
# in a browser

_DONE = "<script>document.title = [document.getElementById('model').dataset.drawn, {what}].join(' ')</script></body>"


def test_the_script_draws_and_turns(tmp_path: Path, rendering: None, browser: Browser) -> None:
    path = write_page(Review(solved_box.result()), tmp_path / "page.html")
    steps = (
        "(() => { const c = document.getElementById('model'), first = c.toDataURL();"
        " const other = document.querySelectorAll('input[name=line]')[1]; other.click(); const second = c.toDataURL();"
        " return (first !== second) + ' ' + document.querySelectorAll('input[name=line]').length; })()"
    )
    path.write_text(path.read_text(encoding="utf-8").replace("</body>", _DONE.replace("{what}", steps)), encoding="utf-8")
    dom, console = browser(path, "--dump-dom")
    assert console == ""
    drawn, changed, choices = re.search(r"<title>(.*?)</title>", dom).group(1).split()  # type: ignore[union-attr]
    assert int(drawn) > 100 and changed == "true" and choices == "2"


def test_a_broken_script_would_be_noticed(tmp_path: Path, browser: Browser) -> None:
    broken = tmp_path / "broken.html"
    broken.write_text("<!DOCTYPE html><title>t</title><script>undefinedName()</script>", encoding="utf-8")
    assert "undefinedName" in browser(broken, "--dump-dom")[1]


def test_a_screenshot_and_a_print_hold_the_model(tmp_path: Path, rendering: None, browser: Browser) -> None:
    path = write_page(Review(solved_box.result()), tmp_path / "page.html")
    browser(path, "--window-size=1200,6000", f"--screenshot={tmp_path / 'page.png'}")
    image = matplotlib.image.imread(tmp_path / "page.png")
    assert image.shape[:2] == (6000, 1200) and len(np.unique((255 * image[::5, ::5, :3]).reshape(-1, 3), axis=0)) > 200
    browser(path, "--no-pdf-header-footer", f"--print-to-pdf={tmp_path / 'page.pdf'}")
    printed = (tmp_path / "page.pdf").read_bytes()
    assert printed.startswith(b"%PDF") and printed.count(b"/Type /Page\n") + printed.count(b"/Type /Page ") >= 4
