"""Insertion loss between two results and transmission loss of one, as commands, tables and pictures; power as a place."""

from __future__ import annotations

import csv
import json
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest

import meshes
import solved_box
from cases import case_of
from murmesh.plugin.cli import main
from murmesh.plugin.compare import compare, insertion_loss
from murmesh.plugin.pictures import contribution_bars, transmission_loss
from murmesh.plugin.pictures import insertion_loss as insertion_picture
from murmesh.plugin.pictures.style import texts
from murmesh.plugin.summary import all_levels, levels
from murmesh.plugin.transmission import Transmission
from murmesh.solver.case.boundary import Port, Radiating, Vibrating
from murmesh.solver.case.load import IncomingWave, SurfaceVelocity
from murmesh.solver.case.motion import Uniform
from murmesh.solver.errors import ResultError
from murmesh.solver.radiation import RADIATED
from murmesh.solver.result import Result, write_result
from murmesh.solver.sweep import solve

LINES = np.linspace(200.0, 600.0, 9)


@cache
def _radiating(speed: float) -> Result:
    mesh = meshes.dome(3, (0.0, 0.08, 0.15, 0.2))
    kinds = {"disc_0": Vibrating(), "disc_1": Vibrating(), "outer": Radiating(ground="rigid")}
    loads = [SurfaceVelocity("disc_0", Uniform(speed + 0j)), SurfaceVelocity("disc_1", Uniform(0.5j * speed))]
    return solve(case_of(mesh, kinds, loads, LINES, {"axis": (0.0, 0.0, 0.4)}, order=2))


def _rows(path: Path) -> list[dict[str, str]]:
    return list(csv.DictReader(line for line in path.read_text("utf-8").splitlines() if not line.startswith("#")))


def test_half_the_velocity_is_an_insertion_loss_of_six_decibels_everywhere(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    for name, speed in (("bare", 0.01), ("half", 0.005)):
        write_result(_radiating(speed), tmp_path / f"{name}.h5")
    assert main(["compare", *(str(tmp_path / f"{name}.h5") for name in ("bare", "half")), str(tmp_path / "out")]) == 0
    said = capsys.readouterr().out
    assert "radiated power, load case 'test' (tones), dB(A) re 1 pW" in said and "dB(A) re 20 uPa" in said
    rows = _rows(tmp_path / "out" / "insertion_loss.csv")
    assert {row["receiver"] for row in rows} == {"axis", RADIATED} and len(rows) == 2 * len(LINES)
    assert all(float(row["insertion_loss_db"]) == pytest.approx(20 * np.log10(2), abs=1e-3) for row in rows)
    assert (tmp_path / "out" / "insertion_loss.png").stat().st_size > 10_000


def test_insertion_losses_need_the_same_lines() -> None:
    one, other = solved_box.result(), _radiating(0.01)
    with pytest.raises(ResultError, match="two sweeps differ"):
        insertion_loss(one, other, "axis")
    held = _radiating(0.01)
    noise = solve(held.case.with_(load_cases=(held.case.load_cases[0].with_(spectrum="density"),)))
    with pytest.raises(ResultError, match="holds tones in one result and density in the other"):
        insertion_loss(held, noise, "axis")
    moved = solve(held.case.with_(receivers=(held.case.receivers[0].with_(position=(0.0, 0.0, 0.41)),)))
    with pytest.raises(ResultError, match=r"'axis' is at \(0.0, 0.0, 0.4\) m .*give it one place in both"):
        insertion_loss(held, moved, "axis")
    found = compare(held, moved)
    assert [pair.loss is None for pair in found.pairs] == [True, False]
    assert any("'axis' is at" in text for text in found.remarks)
    found = compare(_radiating(0.01), _radiating(0.005))
    assert "axis, test (tones): +6.0 dB over all" in texts(insertion_picture.figure(found))


def test_levels_and_ranking_of_the_radiated_power(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    result = _radiating(0.01)
    watts = result.load_cases[0].absorbed[:, -1]
    assert [item.receiver for item in all_levels(result)] == ["axis", RADIATED]
    assert levels(result, RADIATED, weighting="Z").overall == pytest.approx(10 * np.log10(watts.sum() / 1e-12))
    write_result(result, tmp_path / "r.h5")
    assert main(["rank", str(tmp_path / "r.h5"), "--receiver", RADIATED]) == 0
    said = capsys.readouterr().out
    assert "Participation in radiated power" in said and "dB(A) re 1 pW" in said and "share of power" in said
    assert main(["rank", str(tmp_path / "r.h5"), "--receiver", RADIATED, "--json"]) == 0
    held = json.loads(capsys.readouterr().out)
    assert held["unit"] == "dB(A) re 1 pW" and sum(row["share"] for row in held["panels"]) == pytest.approx(1.0)
    assert main(["levels", str(tmp_path / "r.h5")]) == 0
    assert "radiated power [re 1 pW]" in capsys.readouterr().out
    folder, wanted = str(tmp_path / "files"), ["--receiver", RADIATED]
    assert main(["export", str(tmp_path / "r.h5"), folder, *wanted, "--format", "ranking_csv"]) == 0
    assert "dB(A) re 1 pW" in (tmp_path / "files" / "ranking.csv").read_text("utf-8")
    assert main(["draw", str(tmp_path / "r.h5"), folder, *wanted, "--picture", "contribution_bars"]) == 0
    words = " ".join(texts(contribution_bars.figure(result, [RADIATED])))
    assert "share of the power [%]" in words and "re 1 pW" in words


def test_the_transmission_loss_of_a_duct_as_command_table_and_picture(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    mesh = meshes.box(1, 1, 4, (0.1, 0.1, 0.5))
    result = solve(
        case_of(mesh, {"z0": Port(), "z1": Port()}, [IncomingWave("z0", 1.0)], LINES, {"p": (0.05, 0.05, 0.2)}, order=3)
    )
    write_result(result, tmp_path / "duct.h5")
    assert main(["transmission", str(tmp_path / "duct.h5"), str(tmp_path / "out")]) == 0
    assert "Transmission loss from z0 to z1" in capsys.readouterr().out
    rows = _rows(tmp_path / "out" / "transmission_loss.csv")
    assert [float(row["frequency_hz"]) for row in rows] == LINES.tolist()
    assert all(abs(float(row["transmission_loss_db"])) < 2e-3 for row in rows)
    assert main(["transmission", str(tmp_path / "duct.h5"), "--outlet", "z1", "--json"]) == 0
    held = json.loads(capsys.readouterr().out)
    assert (held["inlet"], held["outlet"]) == ("z0", "z1") and len(held["transmission_loss_db"]) == len(LINES)
    found = Transmission.of(result)
    assert found.cut_on == pytest.approx(343.0 / (2 * 0.1), rel=0.01)
    assert "from z0 to z1 · 200–600 Hz · first cut-on of the ports at 17" in " ".join(texts(transmission_loss.figure(found)))
    words = " ".join(texts(transmission_loss.figure(replace(found, cut_on=400.0))))
    assert "Hatched: above the first cut-on, a guess." in words
    assert main(["transmission", str(tmp_path / "duct.h5"), "--outlet", "q"]) == 2
    assert "no port to leave through is called 'q'" in capsys.readouterr().err
