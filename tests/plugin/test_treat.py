"""The treatment study, its tables and pictures, and `murmesh treat`: both rankings, the choice, its verification."""

from __future__ import annotations

import csv
import json
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest

import solved_box
from murmesh.plugin import study as study_module
from murmesh.plugin.check import check_catalogue
from murmesh.plugin.cli import main
from murmesh.plugin.cli import treat as treat_command
from murmesh.plugin.export import EXPORTS
from murmesh.plugin.pictures import before_after, gain_colours, two_rankings
from murmesh.plugin.pictures.style import texts
from murmesh.plugin.probe import rendering_missing
from murmesh.plugin.study import QUIETER, Study, study, tree
from murmesh.solver.case.catalogue import Limits, Treatment
from murmesh.solver.case.model import Case
from murmesh.solver.case.porous import Miki
from murmesh.solver.case.wall import Layers, PorousLayer
from murmesh.solver.errors import ResultError, SolveError
from murmesh.solver.result import Result, write_result
from murmesh.solver.sweep import solve
from murmesh.solver.treatment import Goal, treated_case

FOAM = Layers((PorousLayer(Miki(12000.0), 0.05),))
MADE = ("options.csv", "study.json", "before_after.png", "choice_front.png", "gain_colours.png", "gains.vtp",
        "two_rankings.png")  # fmt: skip


def _case() -> Case:
    """The box with foam for its walls and a mat for its floor, 0.6 kg of either."""
    catalogue = (
        Treatment("foam", 1.5, 12.0, 0.05, FOAM, panels=("x*", "y0", "z1")),
        Treatment("mat", 0.5, 20.0, 0.01, velocity_cut=QUIETER, panels=("z0",)),
    )
    case = solved_box.case(sheet=False)
    sweep = case.sweep.with_(method="reduced", error_bar=False)
    return case.with_(catalogue=catalogue, limits=Limits(mass=1.8), sweep=sweep)


@cache
def _result() -> Result:
    return solve(_case())


@cache
def _study() -> Study:
    return study(_result())


@cache
def _drawn() -> Study:
    return study(_result(), samples=12, verify=False)


def test_both_rankings_are_kept_apart_and_sorted() -> None:
    found = _study()
    assert [m.panel for m in found.treat].count("x0") == 1 and {m.panel for m in found.quieten} == {"x0", "x1", "z0"}
    for measures in (found.quieten, found.treat):
        assert [m.gain for m in measures] == sorted((m.gain for m in measures), reverse=True)
    assert all(m.mass == m.cost == 0.0 for m in found.quieten)


def test_quietening_is_what_a_cut_of_the_velocity_gives() -> None:
    """The mat lowers the velocity by as much, and a full solution of the box with slower panels agrees."""
    found = _study()
    quiet = next(m for m in found.quieten if m.panel == "z0")
    mat = next(m for m in found.treat if m.treatment == "mat")
    assert quiet.gain == pytest.approx(mat.gain, abs=1e-9)
    np.testing.assert_allclose([g for _, g in quiet.bands], [g for _, g in mat.bands], atol=1e-9)
    option = next(o for o in found.whatif.options if o.treatment == "mat")
    slower = solve(treated_case(_case(), [option]))
    before, after = (sum(r.mean_square(n, "run") for n in ("left_ear", "right_ear")) for r in (_result(), slower))
    lines = 10 * np.log10(before / after)
    assert lines.min() - 1e-6 <= quiet.gain <= lines.max() + 1e-6


def test_the_choice_keeps_to_the_limits_of_the_case_and_is_verified() -> None:
    found = _study()
    assert found.limits.mass == 1.8 and found.best.mass <= 1.8
    assert len(found.verified) == 3
    for candidate, checked in zip(found.choice.candidates, found.verified, strict=False):
        assert checked.chosen == found.used(candidate)
        assert checked.gain == pytest.approx(candidate.gain, abs=0.02)


def test_a_prediction_that_fails_is_loud(monkeypatch: pytest.MonkeyPatch) -> None:
    honest = study_module.choose

    def optimistic(*args: object) -> object:
        found = honest(*args)  # type: ignore[arg-type]
        return replace(found, candidates=tuple(replace(c, gain=c.gain + 0.1) for c in found.candidates))

    monkeypatch.setattr(study_module, "choose", optimistic)
    with pytest.raises(SolveError, match=r"was predicted as .* but a full solution gives"):
        study(_result())


def test_the_words_say_whether_the_top_contributor_is_where_the_absorber_goes() -> None:
    found = _study()
    top = found.top_contributor
    treated = [o.panel for o in found.used(found.best) if o.treatment == "foam"]
    assert top in found.words
    assert ("an absorber goes there" in found.words) == (top in treated)
    nothing = replace(found, choice=replace(found.choice, candidates=found.choice.front[:1]))
    assert nothing.best.chosen == () and "no absorber is chosen" in nothing.words


def test_a_goal_of_one_ear_band_and_load_case() -> None:
    goal = Goal(("left_ear",), "idle", (80.0, 160.0), "Z")
    found = study(_result(), goal, Limits(panels=1), verify=False)
    assert not found.verified and all(len(c.chosen) <= 1 for c in found.choice.candidates)
    square = _result().mean_square("left_ear", "idle")
    inside = (_result().frequencies >= 80) & (_result().frequencies <= 160)
    assert found.level == pytest.approx(10 * np.log10(square[inside].sum() / 4e-10), abs=1e-3)
    assert tree(found)["goal"] == {
        "receivers": ["left_ear"], "load_case": "idle", "band_hz": [80.0, 160.0], "weighting": "Z"
    }  # fmt: skip
    assert "predicted, not solved again" in " ".join(texts(before_after.figure(found)))


def test_the_option_table_holds_every_measure_and_choice(tmp_path: Path) -> None:
    found = _study()
    path = EXPORTS["options_csv"].make(found, tmp_path / "options.csv")
    rows = list(csv.DictReader(line for line in path.read_text("ascii").splitlines() if not line.startswith("#")))
    treat = [row for row in rows if row["table"] == "treat"]
    assert [row["measure"] for row in treat] == [m.name for m in found.treat]
    best = found.treat[0]
    assert float(treat[0]["gain_db"]) == pytest.approx(best.gain, abs=0.006)
    assert float(treat[0]["gain_per_kg"]) == pytest.approx(best.gain / best.mass, abs=6e-4)
    assert float(treat[0]["gain_125_hz_db"]) == pytest.approx(dict((b.nominal, g) for b, g in best.bands)["125"], abs=0.006)
    assert [row["louder"] == "yes" for row in treat] == [m.louder for m in found.treat]
    assert all(row["gain_per_kg"] == "" for row in rows if row["table"] == "quieten")
    choices = [row for row in rows if row["table"] == "choice"]
    assert [bool(row["verified_db"]) for row in choices[:4]] == [True, True, True, False]


def test_draws_say_how_stable_every_gain_and_place_is(tmp_path: Path) -> None:
    found = _drawn()
    for measures in (found.quieten, found.treat):
        places = [m.places for m in measures if m.places]
        assert len(places) == len(measures) and all(1 <= low <= high <= len(measures) for low, high in places)
        assert all(m.spread and m.spread[0] <= m.spread[1] for m in measures)
        assert any(m.spread and m.spread[1] - m.spread[0] > 0.05 for m in measures)
    path = EXPORTS["options_csv"].make(found, tmp_path / "options.csv")
    rows = list(csv.DictReader(line for line in path.read_text("ascii").splitlines() if not line.startswith("#")))
    best = found.treat[0]
    row = next(row for row in rows if row["measure"] == best.name)
    assert best.spread and (float(row["gain_low_db"]), float(row["gain_high_db"])) == pytest.approx(best.spread, abs=0.006)
    assert (int(row["place_low"]), int(row["place_high"])) == best.places
    assert next(row for row in rows if row["table"] == "choice")["gain_low_db"]
    held = tree(found)["treat"][0]
    assert held["places_80_percent"] == best.places and held["gain_80_percent_db"] == pytest.approx(best.spread, abs=1e-3)
    words = treat_command.text(found)
    assert "80 % of draws" in words and "SPREAD over 12 draws" in words and "80 % of draws" not in treat_command.text(_study())
    lines = sum(len(axes.collections) for axes in two_rankings.figure(found).axes)
    assert lines == len(found.quieten) + len(found.treat)


def test_cautions_say_who_hears_it_louder_and_what_the_check_doubts() -> None:
    """Foam on y0 whose law is asked below its range; and every measure that is louder at some ear says so."""
    found = _study()
    for m in found.treat:
        option = next(i for i, o in enumerate(found.whatif.options) if o.name == m.name)
        ears = [found.whatif.gain((option,), Goal((ear.name,))) for ear in found.result.case.receivers]
        assert ("louder" in m.caution) == (m.louder or min(ears) < -0.005)
    doubted = {finding.subject for finding in check_catalogue(found.result.case) if finding.severity != "note"}
    assert all((m.treatment in doubted) == bool(m.caution.replace("louder", "").strip(" ;")) for m in found.treat
               if "louder at" not in m.caution)  # fmt: skip
    assert "foam" in doubted and "caution" in treat_command.text(found)


def test_the_tree_is_plain_json() -> None:
    held = json.loads(json.dumps(tree(_study()), allow_nan=False))
    assert held["limits"] == {"mass": 1.8} and held["case_checksum"] == _result().case.checksum
    assert held["choices"][0]["verified_gain_db"] == pytest.approx(held["choices"][0]["predicted_gain_db"], abs=0.02)
    assert held["front"][0] == {"gain_db": 0.0, "mass_kg": 0, "cost_eur": 0, "measures": []}
    assert {band["band_hz"] for band in held["quieten"][0]["third_octaves"]} >= {63.0, 125.0, 200.0}


def test_before_and_after_are_those_of_full_solutions_or_predicted_alike() -> None:
    found = _study()
    solved, predicted = found.before_after, replace(found, verified=()).before_after
    assert [before.receiver for before, _ in solved] == ["left_ear", "right_ear"]
    for (before, after), (same, guess) in zip(solved, predicted, strict=True):
        assert before.overall == same.overall and after.overall < before.overall
        assert guess.overall == pytest.approx(after.overall, abs=0.02)
        np.testing.assert_allclose(guess.band_levels, after.band_levels, atol=0.05)
    assert "solved in full" in " ".join(texts(before_after.figure(found)))


@pytest.mark.usefixtures("rendering")
def test_panels_carry_their_best_treatment_and_its_gain() -> None:
    found = _study()
    words = " ".join(texts(gain_colours.figure(found)))
    for panel, measure in gain_colours.best_measures(found).items():
        assert measure.gain == max(m.gain for m in found.treat if m.panel == panel)
        assert f"{panel}\n{measure.treatment} " in words
    assert "quieter" in words and "left_ear" in words and "load case ‘run’" in words


def test_both_rankings_share_one_scale_in_the_picture() -> None:
    figure = two_rankings.figure(_study())
    left, right = figure.axes
    assert left.get_xlim() == right.get_xlim()
    assert left.get_position().width == pytest.approx(right.get_position().width)
    hatched = sum(bool(bar.get_hatch()) for axes in figure.axes for bar in axes.patches)
    assert hatched == sum(m.louder for m in (*_study().quieten, *_study().treat))


def test_treat_writes_its_tables_and_pictures(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    write_result(_result(), tmp_path / "r.h5")
    status = main(
        [
            "treat",
            str(tmp_path / "r.h5"),
            str(tmp_path / "out"),
            "--panels",
            "2",
            "--exclude",
            "z*",
            "--samples",
            "2",
            "--json",
        ]
    )
    held = json.loads(capsys.readouterr().out)
    assert status == (0 if rendering_missing() is None else 2)
    assert held["limits"] == {"mass": 1.8, "panels": 2, "exclude": ["z*"]}
    assert not any(" on z" in name for choice in held["choices"] for name in choice["measures"])
    left_out = set() if rendering_missing() is None else {"gain_colours.png"}
    assert {path.name for path in (tmp_path / "out").iterdir()} == set(MADE) - left_out


def test_treat_prints_both_rankings_the_choice_and_cautions(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    write_result(_result(), tmp_path / "r.h5")
    assert main(["treat", str(tmp_path / "r.h5"), "--mass", "0", "--unverified", "--samples", "0"]) == 0
    out = capsys.readouterr().out
    assert out.index("QUIETEN") < out.index("TREAT") < out.index("CHOICE within 0 kg") < out.index("Predictions are not")
    assert "nothing" in out.split("CHOICE")[1]  # no mass may be added
    assert main(["treat", str(tmp_path / "r.h5"), "--wanted-gain", "70", "--unverified"]) == 2
    assert "gains 70 dB; the best gains" in capsys.readouterr().err


def test_a_solved_job_is_treated_with_the_catalogue_it_has_now(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Prices, treatments and limits may change without a new solution; anything else may not."""
    job = tmp_path / "box.toml"
    now = [_case().with_(limits=Limits(cost=9.0))]
    monkeypatch.setattr(treat_command, "load_case_file", lambda path: now[0])
    with pytest.raises(ResultError, match=r"is not solved yet: there is no .*box_result.h5'; run murmesh solve"):
        treat_command.result_of(job)
    write_result(_result(), tmp_path / "box_result.h5")
    assert treat_command.result_of(job).case.limits.cost == 9.0
    now[0] = _case().with_(title="another box")
    with pytest.raises(ResultError, match="in more than its treatments; solve it again"):
        treat_command.result_of(job)


def test_an_empty_catalogue_says_the_cure(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    write_result(solved_box.result(sheet=False), tmp_path / "r.h5")
    assert main(["treat", str(tmp_path / "r.h5")]) == 2
    assert "the catalogue holds no treatment that any panel can carry; add one" in capsys.readouterr().err
