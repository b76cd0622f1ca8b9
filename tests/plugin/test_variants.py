"""Designs side by side: insertion loss, where the power goes, their pictures and files; the demonstration that shows them."""

from __future__ import annotations

import csv
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import meshes
from cases import case_of
from murmesh.plugin.cli import demo_pump_set, main
from murmesh.plugin.pictures import variants
from murmesh.plugin.pictures.style import texts
from murmesh.plugin.pictures.variants import draw_maps, losses, powers
from murmesh.plugin.variants import Variant, Variants, loss_between, split, summary_rows, write_losses, write_powers
from murmesh.solver.case.boundary import Impedance, Radiating, Vibrating
from murmesh.solver.case.load import SurfaceVelocity
from murmesh.solver.case.model import Case
from murmesh.solver.case.motion import Uniform
from murmesh.solver.case.wall import Given
from murmesh.solver.levels import A_weighting
from murmesh.solver.sweep import solve

F = np.arange(110.0, 361.0, 10.0)


def _case(velocity: complex, outer: Any) -> Case:
    mesh = meshes.shell(1, (0.25, 0.35))
    loads = [SurfaceVelocity("inner", Uniform(velocity))]
    where = {"near": (0.0, 0.0, 0.3)}
    kinds = {"inner": Vibrating(), "outer": outer}
    return case_of(
        mesh, kinds, loads, F, where, order=2, error_bar=False, method="direct", field_frequencies=np.array([200.0])
    )


@pytest.fixture(scope="module")
def found() -> Variants:
    """A sphere in the open, the same at half its velocity, and in an absorbing shell."""
    made = {
        "open": _case(1e-2 + 0j, Radiating()),
        "half": _case(5e-3 + 0j, Radiating()),
        "closed": _case(1e-2 + 0j, Impedance(Given(2.0 + 0j, "rho_c"))),
    }
    first, *others = [Variant(name, solve(case)) for name, case in made.items()]
    return Variants(first, tuple(others))


def test_half_the_velocity_is_six_decibels_in_every_band(found: Variants) -> None:
    loss = loss_between(found.reference.result, found.others[0].result, "near")
    assert loss.overall == pytest.approx(20 * np.log10(2), abs=1e-6)
    assert [band.nominal for band in loss.bands] == ["125", "160", "200", "250", "315"]
    assert loss.values == pytest.approx(np.full(5, 20 * np.log10(2)), abs=1e-6)


def test_the_loss_of_the_whole_is_that_of_weighted_energies(found: Variants) -> None:
    loss = loss_between(found.reference.result, found.others[1].result, "near")
    energies = [
        (variant.result.mean_square("near") * 10 ** (A_weighting(F) / 10)).sum()  # tones
        for variant in (found.reference, found.others[1])
    ]
    assert loss.overall == pytest.approx(10 * np.log10(energies[0] / energies[1]), abs=1e-9)


def test_power_is_radiated_or_absorbed(found: Variants) -> None:
    open_air, _, closed = (split(variant) for variant in found.all)
    assert open_air["radiated/outer"] == pytest.approx(1.0, abs=1e-9)
    assert closed["surface/outer"] == pytest.approx(1.0, abs=1e-9)
    assert found.others[1].radiated == 0.0
    assert found.reference.radiated / found.others[0].radiated == pytest.approx(4.0)
    rows = summary_rows(found)
    assert rows[0][2] == "-" and rows[1][2] == "+6.0" and rows[2][-1] == "100.0 %"


def test_tables_hold_what_the_pictures_show(found: Variants, tmp_path: Path) -> None:
    lines = write_losses(found, tmp_path / "loss.csv").read_text(encoding="utf-8").splitlines()
    assert lines[0].startswith("# ") and all(line.isascii() for line in lines)
    table = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    half = [row for row in table if row["variant"] == "half"]
    assert [row["band"] for row in half] == ["overall", "125 Hz", "160 Hz", "200 Hz", "250 Hz", "315 Hz"]
    assert all(row["insertion_loss_db"] == "6.02" for row in half)
    powers_ = write_powers(found, tmp_path / "power.csv").read_text(encoding="utf-8").splitlines()
    parts = list(csv.DictReader(line for line in powers_ if not line.startswith("#")))
    for variant in found.all:
        assert sum(float(row["part_of_input"]) for row in parts if row["variant"] == variant.name) == pytest.approx(
            1.0, abs=1e-5
        )


def test_pictures_say_what_they_show(found: Variants) -> None:
    words = texts(losses(found))
    assert "half (+6.0 dB)" in words and "insertion loss [dB]" in words
    assert any("not modelled" in text for text in words)
    words = texts(powers(found))
    assert {"open", "half", "closed", "radiated (outer)", "part of the input [%]"} <= set(words)


def test_maps_go_on_beyond_the_mesh(found: Variants, tmp_path: Path) -> None:
    path = draw_maps(found.all[:2], tmp_path / "maps.png", frequency=200.0, y=0.0, low=(-0.5, -0.4), high=(0.5, 0.4))
    assert path.stat().st_size > 10000


def test_demonstration_of_the_pump_set(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, gmsh_library: None, capsys: pytest.CaptureFixture[str]
) -> None:
    def small(case: Case, journal: Path, **more: Any) -> Any:
        f = np.arange(175.0, 326.0, 25.0)
        sweep = case.sweep.with_(frequencies=f, field_frequencies=f, error_bar=False, order=1, method="direct")
        return solve(case.with_(sweep=sweep), journal, **more)

    monkeypatch.setattr(demo_pump_set, "solve", small)
    monkeypatch.setattr(variants, "_STEP", 0.1)
    assert main(["demo", "--model", "pump_set", str(tmp_path / "out")]) == 0
    out, err = capsys.readouterr()
    assert "both lined" in out and "Insertion loss at mic_side [dB] per third octave [Hz]" in out
    assert "invented" in out and "sound through walls" in out and "finished in" in err
    made = {path.name for path in (tmp_path / "out").rglob("*")}
    assert made >= {"pump_set.toml", "pump_set.py", "both_lined_result.h5", "insertion_loss.csv", "power_split.csv"}
    assert made >= {"insertion_loss.png", "power_split.png", "level_maps.png"}
