"""Two results side by side: what changed is named, and the changes are those of the levels."""

from __future__ import annotations

import csv
import json
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from matplotlib.figure import Figure

import solved_box
from murmesh.plugin.cli import main
from murmesh.plugin.compare import Comparison, compare, comparison_tree, write_csv
from murmesh.plugin.declared import ABSENT, differences, words
from murmesh.plugin.pictures.comparison import figure
from murmesh.plugin.pictures.style import look, texts
from murmesh.solver.case.boundary import Vibrating
from murmesh.solver.case.load import SurfaceVelocity
from murmesh.solver.case.medium import LossFactor
from murmesh.solver.case.model import Case
from murmesh.solver.case.motion import Uniform
from murmesh.solver.errors import ResultError
from murmesh.solver.result import Result, write_result
from murmesh.solver.sweep import solve


def _quieter(case: Case, factor: float) -> Case:
    """The same case with every velocity of "run" changed by a factor."""
    run = case.load_cases[0]
    loads = tuple(SurfaceVelocity(name, Uniform(complex(value) * factor)) for name, value in solved_box.LOADED.items())
    return case.with_(load_cases=(run.with_(loads=loads), *case.load_cases[1:]))


@cache
def _halved() -> Result:
    return solve(_quieter(solved_box.case(), 0.5))


@cache
def _found() -> Comparison:
    return compare(solved_box.result(), _halved())


def test_half_the_velocity_is_six_decibels_less_everywhere() -> None:
    pairs = {(pair.load_case, pair.receiver): pair for pair in _found().pairs}
    assert len(pairs) == 4
    for (load_case, _), pair in pairs.items():
        expected = 20 * np.log10(0.5) if load_case == "run" else 0.0
        changes = np.array([change for *_, change in pair.rows()])
        assert np.allclose(changes[np.isfinite(changes)], expected, atol=1e-6) and np.isfinite(changes[0])


def test_what_changed_is_named_with_its_unit() -> None:
    changes = {change.where: change for change in _found().changes}
    assert set(changes) == {f"load_cases/run/loads/{name}/motion/value" for name in solved_box.LOADED}
    change = changes["load_cases/run/loads/x0/motion/value"]
    assert change.before == "0.001" or change.before.startswith("0.001 ")
    assert change.after.startswith("0.0005")


def test_a_result_compared_with_itself_has_no_change() -> None:
    found = compare(solved_box.result(), solved_box.result())
    assert not found.changes and all(change == 0 for pair in found.pairs for *_, change in pair.rows() if change == change)


def test_differences_go_down_to_fields_kinds_and_names() -> None:
    case = solved_box.case()
    region = case.regions[0].with_(damping=LossFactor(0.1))
    surfaces = tuple(s.with_(boundary=Vibrating()) if s.name == "y0" else s for s in case.surfaces)
    receivers = (*case.receivers[:1], case.receivers[1].with_(name="helper"))
    sweep = case.sweep.with_(order=2)
    nodes = case.mesh.nodes.copy()
    nodes[0] += [0.001, 0.0, 0.0]
    other = case.with_(
        regions=(region,), surfaces=surfaces, receivers=receivers, sweep=sweep, mesh=case.mesh.with_(nodes=nodes)
    )
    found = {change.where: (change.before, change.after) for change in differences(case, other)}
    assert found["regions/air/damping/value"] == ("0.05", "0.1")
    assert found["surfaces/y0/boundary"] == ("rigid", "vibrating")
    assert found["sweep/order"] == ("3", "2")
    assert found["receivers/right_ear"][1] == ABSENT and found["receivers/helper"][0] == ABSENT
    assert "moved by up to 1 mm" in found["mesh"][1]
    assert len(found) == 6


def test_a_change_inside_a_long_table_is_seen() -> None:
    a = np.linspace(0.0, 1.0, 50)
    b = a.copy()
    b[20] += 0.01
    (change,) = differences(a, b)
    assert change.after.endswith("changed by up to 0.01")
    assert not list(differences(a, a * (1 + 1e-15)))


def test_words_name_kind_and_units() -> None:
    assert words(LossFactor(0.02)) == "loss factor (value 0.02)"
    assert "tetrahedra of order 1" in words(solved_box.case().mesh)


def test_receivers_that_only_one_has_are_said() -> None:
    result = solved_box.result()
    case = solved_box.case()
    other = solve(case.with_(receivers=(case.receivers[0].with_(name="helper"), case.receivers[1])))
    found = compare(result, other)
    assert {pair.receiver for pair in found.pairs} == {"right_ear"}
    assert sum("'helper'" in text or "'left_ear'" in text for text in found.left_out) == 4
    none = solve(case.with_(receivers=(case.receivers[0].with_(name="other"),)))
    with pytest.raises(ResultError, match="give them the same names"):
        compare(result, none)


def test_csv_and_json_hold_the_same(tmp_path: Path) -> None:
    lines = write_csv(_found(), tmp_path / "c.csv").read_text().splitlines()
    rows = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    tree = json.loads(json.dumps(comparison_tree(_found()), allow_nan=False))
    flat = [item for place in tree["receivers"] for item in place["levels"]]
    assert len(rows) == len(flat)
    for row, item in zip(rows, flat, strict=True):
        assert row["band"] == item["band"]
        assert (float(row["change_db"]) if row["change_db"] else None) == item["change"]
    assert any(line.startswith("# changed: load_cases/run") for line in lines)


def test_the_picture_says_what_it_compares() -> None:
    with look():
        drawn: Figure = figure(_found())
    said = "\n".join(texts(drawn))
    for part in ("Before and after", "A-weighted", "load_cases/run/loads/x0", "−6.0", "exp(+iωt)", "left_ear, run (density)"):
        assert part in said, part


def test_the_command_prints_and_writes(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    write_result(solved_box.result(), tmp_path / "a.h5")
    write_result(_halved(), tmp_path / "b.h5")
    assert main(["compare", str(tmp_path / "a.h5"), str(tmp_path / "b.h5"), str(tmp_path / "out")]) == 0
    out = capsys.readouterr().out
    assert "Changed in the case:" in out and "-6.0" in out and "re 20 uPa" in out
    assert {p.name for p in (tmp_path / "out").iterdir()} == {
        "comparison.png", "comparison.csv", "comparison.json", "insertion_loss.csv", "insertion_loss.png"
    }  # fmt: skip
    assert main(["compare", str(tmp_path / "a.h5"), str(tmp_path / "b.h5"), "--json"]) == 0
    assert len(json.loads(capsys.readouterr().out)["receivers"]) == 4
