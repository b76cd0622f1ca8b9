"""A sweep stops and goes on, survives a kill, keeps its file whole, and falls back to another solver with the same numbers."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import h5py
import numpy as np
import pytest

from cases import case_of, lossy
from meshes import box
from murmesh.solver import __main__ as command
from murmesh.solver.case.boundary import Impedance, Vibrating
from murmesh.solver.case.hdf5 import write_case
from murmesh.solver.case.load import SurfaceVelocity
from murmesh.solver.case.model import Case
from murmesh.solver.case.motion import Uniform
from murmesh.solver.case.spectrum import Table
from murmesh.solver.case.wall import Given
from murmesh.solver.errors import FallbackWarning, FormatError, RangeError, ResultError, SolveError, ValidityWarning
from murmesh.solver.linalg import Rslab, analyse
from murmesh.solver.result import read_result, write_result
from murmesh.solver.sweep import Journal, Progress, solve


def _case(lines: int = 6, end: float = 1000.0, eta: float = 0.03) -> Case:
    law = Given(Table(np.array([10.0, end]), np.array([2.0 - 3.0j, 4.0 - 1.0j])))
    loads = [SurfaceVelocity("x0", Uniform(1e-3 + 0j)), SurfaceVelocity("y0", Uniform(1e-3j))]
    return case_of(
        box(2, 2, 2), {"x0": Vibrating(), "y0": Vibrating(), "x1": Impedance(law)}, loads,
        np.linspace(60.0, 110.0, lines), {"ear": (0.4, 0.5, 0.6)}, damping=lossy(eta), order=3,
        field_frequencies=np.array([60.0]),
    )  # fmt: skip


def _numbers(result: object) -> np.ndarray:
    held = result.load_cases[0]  # type: ignore[attr-defined]
    return np.concatenate([held.contributions.ravel(), held.supplied.ravel(), held.absorbed.ravel(), held.fields.ravel()])


class _StopError(Exception):
    pass


def test_an_interrupted_sweep_goes_on(tmp_path: Path) -> None:
    case, journal = _case(), tmp_path / "lines"

    def stop(progress: Progress) -> None:
        if progress.done == 3:
            raise _StopError

    with pytest.raises(_StopError):
        solve(case, journal, report=stop)
    assert len(list(journal.glob("line*.npz"))) == 3
    seen: list[Progress] = []
    result = solve(case, journal, report=seen.append)
    assert seen[-1].resumed == 3 and seen[-1].done == seen[-1].total == 6
    assert [p.resumed for p in seen] == [1, 2, 3, 3, 3, 3]
    assert np.array_equal(_numbers(result), _numbers(solve(case)))
    Journal(journal).forget()
    assert not journal.exists()


def test_another_case_s_journal_is_refused(tmp_path: Path) -> None:
    solve(_case(1), tmp_path / "lines")
    with pytest.raises(ResultError, match="holds finished lines of another case or order"):
        solve(_case(2), tmp_path / "lines")


@pytest.mark.parametrize("kept", [0.0, 0.01, 0.5, 0.99])
def test_a_line_that_is_not_whole_is_solved_again(tmp_path: Path, kept: float) -> None:
    case, journal = _case(3), tmp_path / "lines"
    expected = _numbers(solve(case, journal))
    line = journal / "line000001.npz"
    held = line.read_bytes()
    line.write_bytes(held[: int(kept * len(held))])
    seen: list[Progress] = []
    assert np.array_equal(_numbers(solve(case, journal, report=seen.append)), expected)
    assert seen[-1].resumed == 2
    assert line.read_bytes()[:4] == held[:4] and len(line.read_bytes()) == len(held)


def test_a_line_of_another_frequency_is_solved_again(tmp_path: Path) -> None:
    case, journal = _case(3), tmp_path / "lines"
    expected = _numbers(solve(case, journal))
    (journal / "line000000.npz").write_bytes((journal / "line000002.npz").read_bytes())
    assert np.array_equal(_numbers(solve(case, journal)), expected)


def test_a_journal_needs_a_folder(tmp_path: Path) -> None:
    (tmp_path / "lines").write_text("a file")
    with pytest.raises(ResultError, match="is a file, but finished lines need a folder of their own"):
        solve(_case(1), tmp_path / "lines")
    assert (tmp_path / "lines").read_text() == "a file"


KILLED = """
import sys, time
from pathlib import Path
from murmesh.solver.case.hdf5 import read_case
from murmesh.solver.sweep import solve
solve(read_case(sys.argv[1]), Path(sys.argv[2]), method=sys.argv[3], report=lambda p: print(p.done, flush=True))
"""


@pytest.mark.parametrize("method", ["direct", "reduced"])
@pytest.mark.parametrize("lines_before", [1, 4])
def test_a_killed_sweep_goes_on(tmp_path: Path, lines_before: int, method: str) -> None:
    case = _case(40)
    write_case(case, tmp_path / "case.h5")
    command = [sys.executable, "-c", KILLED, str(tmp_path / "case.h5"), str(tmp_path / "lines"), method]
    child = subprocess.Popen(command, stdout=subprocess.PIPE, text=True)
    assert child.stdout
    while int(child.stdout.readline() or "99") < lines_before:
        pass
    time.sleep(0.003 * lines_before)  # somewhere inside a line, or in the writing of one
    child.send_signal(signal.SIGKILL)
    child.stdout.close()
    child.wait()
    seen: list[Progress] = []
    result = solve(case, tmp_path / "lines", report=seen.append, method=method)
    assert max(progress.resumed for progress in seen) >= lines_before
    assert np.allclose(_numbers(result), _numbers(solve(case, method=method)), rtol=1e-12)


def test_result_file(tmp_path: Path) -> None:
    result, path = solve(_case()), tmp_path / "result.h5"
    write_result(result, path)
    again = read_result(path)
    assert np.array_equal(_numbers(again), _numbers(result))
    assert again.case.checksum == result.case.checksum == again.provenance["case_checksum"]
    assert again.provenance["numpy"] == np.__version__
    point = np.array([[0.3, 0.3, 0.3]])
    assert np.array_equal(again.pressure_at(point, 60.0), result.pressure_at(point, 60.0))
    ear = again.pressure_at(np.array([[0.4, 0.5, 0.6]]), 60.0)[0, 0]
    assert ear == pytest.approx(again.load_cases[0].contributions[0, 0].sum(), rel=1e-9)


def test_wrong_result_files(tmp_path: Path) -> None:
    path = tmp_path / "result.h5"
    write_result(solve(_case(1)), path)
    with h5py.File(path, "r+") as file:
        file["case/mesh/nodes"][0, 0] += 0.01
    with pytest.raises(FormatError, match="its checksum differs"):
        read_result(path)
    write_result(solve(_case(1)), path)
    with h5py.File(path, "r+") as file:
        del file["load_cases/0000/supplied"]
    with pytest.raises(FormatError, match="the result is incomplete"):
        read_result(path)
    write_case(_case(1), path)
    with pytest.raises(FormatError, match="is not a murmesh result"):
        read_result(path)


def _replace(file: h5py.File, name: str, value: object) -> None:
    del file[name]
    file[name] = value


TAMPERED = {
    "provenance": (lambda file: file.attrs.__setitem__("provenance", "{"), "the result is incomplete"),
    "order": (lambda file: _replace(file, "orders", [3, 9]), "orders has shape"),
    "version": (lambda file: file.attrs.__setitem__("version", 99), "this murmesh reads up to 2"),
    "lines": (lambda file: _replace(file, "frequencies", [60.0, 61.0]), "frequencies are not those of the case's sweep"),
    "load case": (lambda file: file["load_cases/0000"].attrs.__setitem__("name", "x"), "load_cases are not those of the case"),
    "shape": (
        lambda file: _replace(file, "load_cases/0000/supplied", np.zeros((2, 3))),
        r"load_cases/0000/supplied has shape \(2, 3\), expected \(2, 2\)",
    ),
    "text": (lambda file: _replace(file, "load_cases/0000/contributions", "none"), "contributions has shape"),
    "fields": (
        lambda file: _replace(file, "load_cases/0000/fields", np.zeros((2, 5, 1))),
        r"fields has shape \(2, 5, 1\), expected one block for each of the 1 field frequencies",
    ),
}  # fmt: skip


@pytest.mark.parametrize("what", TAMPERED)
def test_tampered_result_files(tmp_path: Path, what: str) -> None:
    change, words = TAMPERED[what]
    path = tmp_path / "result.h5"
    write_result(solve(_case(2)), path)
    with h5py.File(path, "r+") as file:
        change(file)
    with pytest.raises(FormatError, match=words):
        read_result(path)


@pytest.mark.parametrize("kept", [0.0, 0.01, 0.5, 0.99])
def test_truncated_result_files(tmp_path: Path, kept: float) -> None:
    path = tmp_path / "result.h5"
    write_result(solve(_case(1)), path)
    held = path.read_bytes()
    path.write_bytes(held[: int(kept * len(held))])
    with pytest.raises(FormatError, match=r"is not a readable HDF5 file \(truncated or foreign\)"):
        read_result(path)


@pytest.mark.parametrize("solver", ["rslab", "superlu"])
def test_an_undamped_cavity_at_its_mode(solver: str) -> None:
    """At the mode no solution is trusted; 0.1 % beside it the linear system is solved as well as ever."""
    case = case_of(
        box(2, 1, 1, (1.0, 0.1, 0.1)), {"x0": Vibrating()}, [SurfaceVelocity("x0", Uniform(1e-3 + 0j))], [171.5],
        {"ear": (0.2, 0.05, 0.05)}, order=6,
    )  # fmt: skip
    with pytest.raises(SolveError, match=r"driven exactly at a mode\? State its damping|a rigid cavity without damping"):
        solve(case, solver=solver)
    beside = solve(case.with_(sweep=case.sweep.with_(frequencies=np.array([171.5 * 1.001]))), solver=solver)
    k = 2 * np.pi * 171.5 * 1.001 / 343.0
    exact = -1j * 1.21 * 343.0 * 1e-3 * np.cos(0.8 * k) / np.sin(k)
    assert beside.load_cases[0].residual.max() < 1e-10
    assert beside.load_cases[0].contributions[0, 0, 0] == pytest.approx(exact, rel=1e-3)


def test_a_short_table_stops_before_any_factorisation(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(Rslab, "factor", lambda *_: pytest.fail("factorised"))
    with pytest.raises(RangeError, match=r"holds 10 .. 90 Hz, but 100 Hz is asked"):
        solve(_case(end=90.0))


def test_a_wall_that_creates_sound_is_said() -> None:
    case = _case(2)
    active = Impedance(Given(-2.0 + 1.0j))
    surfaces = tuple(s.with_(boundary=active) if s.name == "x1" else s for s in case.surfaces)
    with pytest.warns(ValidityWarning, match=r"surface/x1: its law creates sound from 60 to 110 Hz .* Re Z < 0"):
        solve(case.with_(surfaces=surfaces))


def test_superlu_gives_the_same_numbers() -> None:
    case = _case(2)
    default, other = solve(case), solve(case, solver="superlu")
    assert other.provenance["linear_solver"] == "SuperLU"
    assert np.abs(_numbers(default) - _numbers(other)).max() < 1e-10 * np.abs(_numbers(default)).max()
    p, q = (result.load_cases[0].contributions for result in (default, other))
    assert np.allclose(p, q, rtol=1e-10, atol=0.0)


def test_a_failed_factorisation_falls_back_and_says_so(monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(*_: object, **__: object) -> None:
        raise RuntimeError("zero pivot")

    case = _case(1)
    expected = _numbers(solve(case))
    monkeypatch.setattr(Rslab, "_numeric", fail)
    with pytest.warns(FallbackWarning, match=r"failed \(zero pivot\); the next way is taken"):
        assert np.allclose(_numbers(solve(case)), expected, rtol=1e-9)


def test_unknown_solver() -> None:
    with pytest.raises(SolveError, match="no sparse solver is called 'best'"):
        analyse(None, "best")  # type: ignore[arg-type]


def test_the_solver_alone(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    write_case(_case(2), tmp_path / "case.h5")
    assert command.main([str(tmp_path / "case.h5")]) == 0
    out, err = capsys.readouterr()
    assert out == f"{tmp_path / 'case_result.h5'}\n"
    assert "2/2 lines" in err
    assert read_result(tmp_path / "case_result.h5").frequencies.size == 2
    assert not list(tmp_path.glob("*.lines"))
    assert command.main([str(tmp_path / "none.h5")]) == 2
    assert "there is no file" in capsys.readouterr().err
    assert command.main([]) == 2
    assert command.main(["--help"]) == 0
    assert "example: python -m murmesh.solver" in capsys.readouterr().out


BARRED = """
import sys
class Bar:
    def find_spec(self, name, path=None, target=None):
        if name.split(".")[0] in ("gmsh", "pyvista", "meshio", "matplotlib", "vtk", "vtkmodules") or name == "murmesh.plugin":
            raise ImportError(name)
sys.meta_path.insert(0, Bar())
from murmesh.solver.__main__ import main
sys.exit(main(sys.argv[1:]))
"""


def test_the_solver_needs_nothing_of_the_plugin(tmp_path: Path) -> None:
    write_case(_case(1), tmp_path / "case.h5")
    done = subprocess.run([sys.executable, "-c", BARRED, str(tmp_path / "case.h5")], capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    assert os.path.exists(done.stdout.strip())


def test_the_command_s_exit_status(tmp_path: Path) -> None:
    (tmp_path / "case.h5").write_text("no case")
    call = [sys.executable, "-m", "murmesh.solver", str(tmp_path / "case.h5")]
    done = subprocess.run(call, capture_output=True, text=True)
    assert (done.returncode, done.stdout) == (2, "")
    assert "is not a readable HDF5 file" in done.stderr and "Traceback" not in done.stderr


def test_an_interrupt_says_how_to_go_on(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    write_case(_case(1), tmp_path / "case.h5")

    def interrupted(*_: object, **__: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(command, "solve", interrupted)
    assert command.main([str(tmp_path / "case.h5")]) == 130
    assert "the same command goes on from there" in capsys.readouterr().err
