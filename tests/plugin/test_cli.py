"""The command line as a user meets it: exit status, the answer alone on standard output, cures instead of tracebacks."""

from __future__ import annotations

import argparse
import json
import re
import shutil
import signal
import subprocess
import sys
from pathlib import Path
from typing import Any

import meshio
import numpy as np
import pytest

from meshes import box
from murmesh import sample_geometry
from murmesh.plugin import cli, probe
from murmesh.plugin.cli import demo as demo_command
from murmesh.plugin.cli import draw as draw_command
from murmesh.plugin.cli import main
from murmesh.plugin.cli.command import COMMANDS, band_argument
from murmesh.plugin.load import load_case_file
from murmesh.solver.case.hdf5 import read_case, write_case
from murmesh.solver.case.model import Case
from murmesh.solver.result import read_result
from murmesh.solver.space import discretise

SAMPLES = Path(sample_geometry.__path__[0])
cli._parser()  # registers every subcommand


def _shrunk(case: Case) -> Case:
    """The same case with five lines and cheap elements."""
    lines = np.array([90.0, 95.0, 120.0, 190.0, 342.0])
    return case.with_(sweep=case.sweep.with_(frequencies=lines, order=2))


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the lined duct's case at few lines, solved once."""
    made = tmp_path_factory.mktemp("duct")
    case = read_case(SAMPLES / "cab_case.h5")
    write_case(_shrunk(case), made / "cab.h5")
    assert main(["solve", str(made / "cab.h5")]) == 0
    return made


@pytest.mark.parametrize("name", COMMANDS)
def test_help_shows_an_example(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as end:
        main([name, "--help"])
    assert end.value.code == 0
    assert f"example:\n  murmesh {name} " in capsys.readouterr().out


def test_solve_says_its_file_and_nothing_else(folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["solve", str(folder / "cab.h5"), str(tmp_path / "r.h5")]) == 0
    out, err = capsys.readouterr()
    assert out == f"{tmp_path / 'r.h5'}\n"
    assert "5/5 lines" in err and "power imbalance" in err
    assert not list(tmp_path.glob("*.lines"))


@pytest.mark.parametrize(
    "words",
    [
        ["levels"], ["rank"], ["rank", "--load-case", "tones", "--band", "90:200", "--receiver", "left_ear"], ["power"],
        ["power", "--load-case", "tones"],
    ],
)  # fmt: skip
def test_answers_about_a_result(folder: Path, capsys: pytest.CaptureFixture[str], words: list[str]) -> None:
    command, *options = words
    assert main([command, str(folder / "cab_result.h5"), *options]) == 0
    plain = capsys.readouterr()
    assert plain.err == ""
    assert main([command, str(folder / "cab_result.h5"), *options, "--json"]) == 0
    tree = json.loads(capsys.readouterr().out)
    assert tree
    for text in ("dB", "broadband", "tones"):
        assert text in plain.out or command == "power" or text in ("broadband", "tones")


def test_levels_state_their_reference_and_cautions(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    main(["levels", str(folder / "cab_result.h5"), "--weighting", "C"])
    out = capsys.readouterr().out
    assert "dB(C) re 20 uPa" in out and "not measurements" in out and "decided by qualified people" in out


def test_ranking_says_what_it_ranks(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    main(["rank", str(folder / "cab_result.h5")])
    out = capsys.readouterr().out
    assert "not treating it" in out and "Shares add up to 100.000000 %" in out
    assert sum(name in out for name in read_case(SAMPLES / "cab_case.h5").panels) == 14


def test_modes_of_a_case(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["modes", str(folder / "cab.h5"), "--count", "3", "--order", "2", "--json"]) == 0
    frequencies = json.loads(capsys.readouterr().out)["frequencies_hz"]
    assert len(frequencies) == 3 and frequencies[0] < 1 and 80 < frequencies[1] < 130


def test_files_and_flat_pictures(folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["export", str(folder / "cab_result.h5"), str(tmp_path / "files"), "--frequency", "95"]) == 0
    written = capsys.readouterr().out.split()
    assert {Path(name).suffix for name in written} >= {".vtu", ".vtm", ".vtkhdf", ".csv", ".json"}
    assert all(Path(name).is_file() for name in written)
    assert main(["draw", str(folder / "cab_result.h5"), str(tmp_path / "p"), "--picture", "contribution_bars"]) == 0
    assert (tmp_path / "p" / "contribution_bars.png").stat().st_size > 10_000


def test_pictures_that_cannot_be_drawn(
    folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(draw_command, "rendering_missing", lambda: "no GL: apt-get install libegl1")
    words = ["draw", str(folder / "cab_result.h5"), str(tmp_path), "--picture", "surface_map", "--picture", "panel_map"]
    assert main(words) == 2
    out, err = capsys.readouterr()
    assert "panel_map.png" in out and "left out surface_map: no GL: apt-get install libegl1" in err


# ---------------------------------------------------------------------------------------------------------------------
# from a model to a case


def test_start_check_case_and_back(tmp_path: Path, gmsh_library: None, capsys: pytest.CaptureFixture[str]) -> None:
    shutil.copy(SAMPLES / "duct.geo", tmp_path / "duct.geo")
    assert main(["start", str(tmp_path / "duct.geo")]) == 0
    job = tmp_path / "duct.toml"
    assert capsys.readouterr().out == f"{job}\n"
    for group in ("duct_air", "inlet", "outlet", "lining", "walls"):
        assert f'"{group}"' in job.read_text()
    assert main(["start", str(tmp_path / "duct.geo")]) == 2
    assert "exists already" in capsys.readouterr().err
    assert main(["check", str(job)]) == 0
    assert "0 errors" in capsys.readouterr().out
    assert main(["case", str(job)]) == 0
    assert read_case(tmp_path / "duct.h5").title == "duct"


def test_start_from_a_mesh_without_groups(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The job it writes stands as it is: its outer walls become hard, and the check says so."""
    mesh = box(2, 2, 2)
    meshio.write_points_cells(tmp_path / "room.vtu", mesh.nodes, [("tetra", mesh.tets)])
    assert main(["start", str(tmp_path / "room.vtu")]) == 0
    capsys.readouterr()
    assert main(["check", str(tmp_path / "room.toml")]) == 0
    assert "unnamed_walls" in capsys.readouterr().out
    assert load_case_file(tmp_path / "room.toml").surfaces[0].name == "unnamed_walls"


def test_findings_have_status_one(tmp_path: Path, gmsh_library: None, capsys: pytest.CaptureFixture[str]) -> None:
    shutil.copy(SAMPLES / "duct.geo", tmp_path / "duct.geo")
    text = (SAMPLES / "duct.toml").read_text()
    (tmp_path / "duct.toml").write_text(text.replace("[surfaces.lining]", "[surfaces.linning]"))
    assert main(["check", str(tmp_path / "duct.toml"), "--json"]) == 1
    findings = json.loads(capsys.readouterr().out)
    assert any("linning" in json.dumps(finding) for finding in (findings if isinstance(findings, list) else [findings]))
    assert main(["case", str(tmp_path / "duct.toml")]) == 1
    assert not (tmp_path / "duct.h5").exists()


@pytest.mark.parametrize("name", ["cab.toml", "duct.toml"])
def test_sample_jobs_have_no_errors(name: str, gmsh_library: None, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["check", str(SAMPLES / name)]) == 0
    assert "0 errors" in capsys.readouterr().out


def test_the_shipped_case_is_what_the_job_gives(gmsh_library: None) -> None:
    shipped, made = read_case(SAMPLES / "cab_case.h5"), load_case_file(SAMPLES / "cab.toml")
    for group in ("regions", "surfaces", "receivers", "load_cases", "catalogue"):
        assert [item.name for item in getattr(shipped, group)] == [item.name for item in getattr(made, group)]
    assert shipped.panels == made.panels and len(shipped.panels) == 14
    assert np.array_equal(shipped.sweep.frequencies, made.sweep.frequencies)
    assert len(shipped.mesh.tets) == pytest.approx(len(made.mesh.tets), rel=0.1)
    unknowns = [discretise(case).dofs.n_dofs for case in (shipped, made)]
    assert unknowns[0] == pytest.approx(unknowns[1], rel=0.15)


# ---------------------------------------------------------------------------------------------------------------------
# what goes wrong


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["solve", "none.h5"], "there is no file 'none.h5'; check the path"),
        (["levels", "none.h5"], "there is no file"),
        (["check", "none.toml"], "there is no job file 'none.toml'; check the path"),
        (["kinds", "boundry kinds"], "did you mean 'boundary kinds'"),
    ],
)
def test_errors_are_one_message(words: list[str], message: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(words) == 2
    out, err = capsys.readouterr()
    assert out == "" and message in err and "Traceback" not in err


def test_wrong_names_in_a_result(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    result = str(folder / "cab_result.h5")
    assert main(["rank", result, "--receiver", "left_eye"]) == 2
    assert "did you mean 'left_ear'" in capsys.readouterr().err
    assert main(["draw", result, "x", "--picture", "cut_plan"]) == 2
    assert "cut_plane" in capsys.readouterr().err
    assert main(["solve", result]) == 2
    assert "is not a murmesh case" in capsys.readouterr().err
    assert main(["levels", str(folder / "cab.h5")]) == 2
    assert "is not a murmesh result" in capsys.readouterr().err


def test_an_interrupt_has_status_130(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    def interrupted(_: str) -> str:
        raise KeyboardInterrupt

    monkeypatch.setattr("murmesh.plugin.cli.kinds.table_of_kinds", interrupted)
    assert main(["kinds"]) == 130
    assert "the same command goes on from there" in capsys.readouterr().err


@pytest.mark.parametrize("method", ["direct", "reduced"])
def test_ctrl_c_leaves_what_is_finished(folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], method: str) -> None:
    """A real signal to a real process: it says how to go on, and the same command does."""
    case = read_case(folder / "cab.h5")
    lines = case.sweep.with_(frequencies=np.linspace(90.0, 190.0, 60), order=2, error_bar=False, field_frequencies=[])
    write_case(case.with_(sweep=lines), tmp_path / "cab.h5")
    call = ["solve", str(tmp_path / "cab.h5"), "--method", method]
    program = "import sys; from murmesh.plugin.cli import main; sys.exit(main(sys.argv[1:]))"
    child = subprocess.Popen([sys.executable, "-c", program, *call], stderr=subprocess.PIPE, text=True)
    assert child.stderr
    said = ""
    while "2/60 lines" not in said and (letter := child.stderr.read(1)):
        said += letter
    child.send_signal(signal.SIGINT)
    said += child.stderr.read()
    child.stderr.close()
    assert child.wait() == 130, said
    assert "interrupted; finished lines are kept, the same command goes on from there" in said
    assert "Traceback" not in said and "factorised" in said and "s left" in said
    assert not (tmp_path / "cab_result.h5").exists()
    assert main(call) == 0
    assert re.search(r"[2-9] kept from before", capsys.readouterr().err)
    assert read_result(tmp_path / "cab_result.h5").frequencies.size == 60


def test_bands_are_two_numbers() -> None:
    assert band_argument("80:160") == (80.0, 160.0)
    with pytest.raises(argparse.ArgumentTypeError, match="give LOWER:UPPER in Hz"):
        band_argument("80-160")


# ---------------------------------------------------------------------------------------------------------------------
# the demonstration


def _shrink_demo(monkeypatch: pytest.MonkeyPatch) -> None:
    solve = demo_command.solve

    def small(case: Case, journal: Path, **more: Any) -> Any:
        return solve(_shrunk(case), journal, **more)

    monkeypatch.setattr(demo_command, "solve", small)


def test_demonstration(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, gmsh_library: None, rendering: None, capsys: pytest.CaptureFixture[str]
) -> None:
    _shrink_demo(monkeypatch)
    assert main(["demo", str(tmp_path / "out")]) == 0
    out, err = capsys.readouterr()
    assert "floor_front" in out and "dB(A) re 20 uPa" in out and "invented" in out
    assert f"everything is in {tmp_path / 'out'}" in err
    made = {path.name for path in (tmp_path / "out").rglob("*")}
    assert made >= {"cab.toml", "cab.h5", "cab_result.h5", "field.vtu", "field.vtkhdf", "ranking.csv", "surface_map.png"}
    assert read_result(tmp_path / "out" / "cab_result.h5").order == 2


def test_demonstration_without_gmsh_and_gl(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    _shrink_demo(monkeypatch)
    monkeypatch.setattr(demo_command, "gmsh_missing", lambda: f"gmsh cannot be loaded: {probe.GMSH_CURE}")
    monkeypatch.setattr(draw_command, "rendering_missing", lambda: f"no picture can be drawn: {probe.RENDERING_CURE}")
    assert main(["demo", str(tmp_path / "out")]) == 2
    out, err = capsys.readouterr()
    assert "floor_front" in out
    assert probe.GMSH_CURE in err and probe.RENDERING_CURE in err and "Traceback" not in err
    made = {path.name for path in (tmp_path / "out").rglob("*")}
    assert made >= {"cab_result.h5", "field.vtu", "ranking.csv", "contribution_bars.png"}
    assert "surface_map.png" not in made


def test_demonstration_into_a_file_is_refused(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "out").write_text("")
    assert main(["demo", str(tmp_path / "out")]) == 2
    assert "is a file; give the name of a folder" in capsys.readouterr().err
