"""The treatment study of a duct against closed forms, with walls as an impedance tube measures them, from a job file.

The job names CSV files in every way they come: units, time signs, parts; all say the same as the law they were sampled from.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest
from exact_duct import Complex, Floats, closed, field, foam, gap

from meshes import box
from murmesh.plugin.check import check_catalogue
from murmesh.plugin.cli import main
from murmesh.plugin.cli import treat as treat_command
from murmesh.plugin.job import Job
from murmesh.plugin.model import build_case
from murmesh.plugin.study import Study, study
from murmesh.solver.case.catalogue import Limits
from murmesh.solver.case.medium import GivenFluid
from murmesh.solver.case.model import Case
from murmesh.solver.errors import FieldError
from murmesh.solver.levels import A_weighting
from murmesh.solver.result import write_result
from murmesh.solver.sweep import solve
from tagged import tagged

AIR, LENGTH, ETA = GivenFluid(1.205, 343.0), 0.83, 0.01
LINES = np.arange(100.0, 1001.0, 10.0)
EARS = (0.0, 0.3)
RHO_C = AIR.density * AIR.speed

HEAD = f"""
title = "duct"
default_boundary = "rigid"
[regions.air]
medium = {{ kind = "fluid", density = {AIR.density}, speed = {AIR.speed} }}
damping = {{ kind = "loss_factor", value = {ETA} }}
[surfaces.x0]
kind = "vibrating"
velocity = 0.01
[surfaces.x1]
kind = "rigid"
[surfaces."[yz]*"]
kind = "rigid"
[loads]
spectrum = "tones"
[[receivers]]
name = "left"
position = [{EARS[0]}, 0.025, 0.025]
[[receivers]]
name = "right"
position = [{EARS[1]}, 0.025, 0.025]
[sweep]
start = {LINES[0]}
stop = {LINES[-1]}
step = 10.0
order = 6
method = "reduced"
error_bar = false
"""
LAW = """{ kind = "layers", layers = [
    { kind = "porous", law = { kind = "miki", flow_resistivity = 12000.0 }, thickness = 0.03 },
    { kind = "air_gap", thickness = 0.05 } ] }"""
WALLS = {
    "law": LAW,
    "si": "{ kind = 'given', csv = 'si.csv' }",
    "rho_c": "{ kind = 'given', csv = 'bare.csv', unit = 'rho_c' }",
    "other_sign": "{ kind = 'given', csv = 'conjugate.csv', time_sign = '-' }",
    "polar": "{ kind = 'given', csv = 'polar.csv', unit = 'Pa.s/m' }",
    "admittance": "{ kind = 'given', csv = 'admittance.csv', unit = 'rho_c', form = 'admittance' }",
    "thirds": "{ kind = 'given', csv = 'thirds.csv', unit = 'rho_c', extrapolate = true }",
}  # fmt: skip


def _z(f: Floats) -> Complex:
    """Z [Pa s/m] of the stack in closed form."""
    return np.asarray(1 / closed([foam(f, AIR, 12000.0, 0.03), gap(f, AIR, 0.05)])[0])


def _table(path: Path, header: str, f: Floats, first: Floats, second: Floats) -> None:
    rows = [f"{x!r},{a!r},{b!r}" for x, a, b in zip(f.tolist(), first.tolist(), second.tolist(), strict=True)]
    path.write_text("\n".join([header, *rows]) + "\n")


def _tube(folder: Path) -> None:
    """What a tube's software might export of the stack, in its ways."""
    z, f = _z(LINES), LINES
    zeta, y = z / RHO_C, RHO_C / z
    _table(folder / "si.csv", "frequency [Hz],re [Pa.s/m],im [Pa.s/m]", f, z.real, z.imag)
    _table(folder / "bare.csv", "f,re,im", f, zeta.real, zeta.imag)
    _table(folder / "conjugate.csv", "f,re [rho_c],im [rho_c]", f, zeta.real, -zeta.imag)
    _table(folder / "polar.csv", "f [kHz],magnitude,phase_deg", f / 1000, np.abs(z), np.angle(z, deg=True))
    _table(folder / "admittance.csv", "f,re,im", f, y.real, y.imag)
    thirds = 1000 * 10 ** (np.arange(-10, 1) / 10)
    _table(folder / "thirds.csv", "f,re,im", thirds, (_z(thirds) / RHO_C).real, (_z(thirds) / RHO_C).imag)


def _job(folder: Path, walls: dict[str, str]) -> Case:
    """The case of a job file whose catalogue holds some walls for the end of the duct."""
    entry = (
        '[[catalogue]]\nname = "{}"\nmass_per_area = 1.0\ncost_per_area = 10.0\nthickness = 0.08\npanels = ["x1"]\nwall = {}\n'
    )
    text = HEAD + "".join(entry.format(name, " ".join(wall.split())) for name, wall in walls.items())
    (folder / "duct.toml").write_text(text)
    return build_case(Job.from_toml(folder / "duct.toml"), tagged(box(6, 1, 1, (LENGTH, 0.05, 0.05))))


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    made = tmp_path_factory.mktemp("tube")
    _tube(made)
    return made


@pytest.fixture(scope="module")
def found(folder: Path) -> Study:
    return study(solve(_job(folder, WALLS)), limits=Limits(panels=1))


@cache
def _energies(treated: bool) -> Floats:
    """A-weighted |p|^2 (nf,) summed over the ears, from the closed form."""
    end = (1 / _z(LINES) if treated else 0, 0)
    p = [field(x, LINES, AIR, LENGTH, (0, -0.01), end, ETA) for x in EARS]
    return np.asarray(10 ** (A_weighting(LINES) / 10) * np.sum(np.abs(p) ** 2, axis=0))


def _gain(inside: npt.NDArray[np.bool_]) -> float:
    return float(10 * np.log10(_energies(False)[inside].sum() / _energies(True)[inside].sum()))


def test_the_study_gains_what_the_closed_form_gains(found: Study) -> None:
    """Level before, gain in dB(A) and per third octave, verified gain: for the stack as a law and in every way to read it."""
    assert found.level == pytest.approx(10 * np.log10(0.25 * _energies(False).sum() / 4e-10), abs=1e-3)
    exact = _gain(LINES > 0)
    assert exact > 5.0 and {measure.treatment for measure in found.treat} == WALLS.keys()
    for measure in found.treat:
        coarse = measure.treatment == "thirds"
        assert measure.gain == pytest.approx(exact, abs=0.1 if coarse else 1e-3), measure.name
        for band, gain in measure.bands:
            inside = (band.lower <= LINES) & (band.upper > LINES)
            assert gain == pytest.approx(_gain(inside), abs=0.5 if coarse else 2e-3), (measure.name, band)
    for checked in found.verified:
        assert checked.gain == pytest.approx(exact, abs=1e-3)


def test_right_time_signs_pass_and_a_wrong_one_is_doubted(folder: Path) -> None:
    assert not check_catalogue(_job(folder, {name: wall for name, wall in WALLS.items() if name != "law"}))
    wrong = _job(folder, {"foam": "{ kind = 'given', csv = 'conjugate.csv' }", "law": LAW})
    [doubt] = [finding for finding in check_catalogue(wrong) if finding.subject == "foam"]
    assert (doubt.code, doubt.severity) == ("time_sign_doubtful", "warning") and "time_sign = '-'" in doubt.cure
    bands = [dict(measure.bands) for measure in study(solve(wrong), limits=Limits(panels=1), verify=False).treat]
    assert max(abs(bands[0][band] - bands[1][band]) for band in bands[0]) > 3.0  # what a wrong sign costs


def test_a_catalogue_that_creates_sound_is_refused(
    folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """The catalogue of a job may change after it was solved: `murmesh treat` looks at it again."""
    _table(tmp_path / "active.csv", "f,re [rho_c],im [rho_c]", LINES, np.where(LINES == 500.0, -0.1, 1.0), -500 / LINES)
    write_result(solve(_job(folder, {"foam": LAW})), tmp_path / "duct_result.h5")
    case = _job(tmp_path, {"foam": "{ kind = 'given', csv = 'active.csv' }"})
    monkeypatch.setattr(treat_command, "load_case_file", lambda path: case)
    assert main(["treat", str(tmp_path / "duct.toml")]) == 2
    shown = capsys.readouterr()
    assert "active_wall" in shown.err and "Re Z < 0 at 1 of 91 lines, first at 500 Hz" in shown.err and not shown.out
    assert "nothing computed; cure the errors of the catalogue" in shown.err


def test_a_table_says_its_unit(folder: Path) -> None:
    with pytest.raises(FieldError, match=r"'bare\.csv': the unit is not said; write it behind the column, re \[Pa\.s/m\]"):
        _job(folder, {"foam": "{ kind = 'given', csv = 'bare.csv' }"})
