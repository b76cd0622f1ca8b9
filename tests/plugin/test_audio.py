"""Sounds: differences of level are those computed, tones lie where they should, files say what they are."""

from __future__ import annotations

import wave
from functools import cache
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest

import solved_box
from murmesh.plugin.audio import LABEL, RATE, sound, sounds, write_sounds
from murmesh.plugin.cli import main
from murmesh.plugin.summary import levels
from murmesh.solver.case.medium import LossFactor
from murmesh.solver.errors import ResultError
from murmesh.solver.levels import level, overall_energy
from murmesh.solver.result import Result, write_result
from murmesh.solver.sweep import solve


@cache
def _lined() -> Result:
    case = solved_box.case()
    return solve(case.with_(regions=(case.regions[0].with_(damping=LossFactor(0.4)),)))


def _samples(path: Path) -> npt.NDArray[np.float64]:
    """The samples of a 24-bit file, full scale 1."""
    with wave.open(str(path)) as file:
        assert (file.getframerate(), file.getsampwidth(), file.getnchannels()) == (RATE, 3, 1)
        raw = np.frombuffer(file.readframes(file.getnframes()), np.uint8).reshape(-1, 3)
    return (np.pad(raw, ((0, 0), (1, 0))).copy().view("<i4").ravel() / 2.0**31).astype(np.float64)


def _written(load_case: str, folder: Path) -> dict[str, Path]:
    made = sounds((("before", solved_box.result()), ("after", _lined())), (), load_case)
    return {path.name: path for path in write_sounds(made, folder) if path.suffix == ".wav"}


@pytest.mark.parametrize("load_case", ["run", "idle"])
def test_the_difference_of_two_files_is_the_computed_one(load_case: str, tmp_path: Path) -> None:
    paths = _written(load_case, tmp_path)
    assert len(paths) == 4
    for receiver in ("left_ear", "right_ear"):
        heard = [_samples(paths[f"{receiver}_{load_case}_{name}.wav"]) for name in ("before", "after")]
        computed = [levels(r, receiver, load_case, "Z").overall for r in (solved_box.result(), _lined())]
        difference = 10 * np.log10(np.mean(heard[1] ** 2) / np.mean(heard[0] ** 2))
        assert abs(computed[1] - computed[0]) > 1.0
        assert difference == pytest.approx(computed[1] - computed[0], abs=0.1)


def test_the_loudest_file_is_just_below_full_scale_and_none_clips(tmp_path: Path) -> None:
    peaks = [np.abs(_samples(path)).max() for path in _written("run", tmp_path).values()]
    assert max(peaks) == pytest.approx(0.89, abs=1e-3)


@pytest.mark.parametrize("load_case", ["run", "idle"])
def test_the_pressure_has_the_computed_level(load_case: str) -> None:
    result = solved_box.result()
    made = sound(result, "left_ear", load_case)
    spectrum = result.load_case_of(load_case).spectrum
    exact = level(overall_energy(result.frequencies, result.mean_square("left_ear", load_case), spectrum, "Z"))
    assert level(np.mean(made.pressure**2)) == pytest.approx(float(exact), abs=0.03)


def test_tones_lie_at_their_frequencies_with_their_amplitudes() -> None:
    result = solved_box.result()
    made = sound(result, "right_ear", "idle", seconds=2.0)
    spectrum = 2 * np.abs(np.fft.rfft(made.pressure)) / len(made.pressure)
    lines = np.fft.rfftfreq(len(made.pressure), 1 / RATE)
    loud = np.flatnonzero(spectrum > 1e-6 * spectrum.max())
    assert np.allclose(lines[loud], result.frequencies)
    assert np.allclose(spectrum[loud], np.sqrt(2 * result.mean_square("right_ear", "idle")), rtol=1e-6)


def test_a_density_holds_nothing_outside_the_sweep_and_is_the_same_every_time() -> None:
    result = solved_box.result()
    made, again = (sound(result, "left_ear", "run") for _ in range(2))
    assert np.array_equal(made.pressure, again.pressure)
    spectrum = np.abs(np.fft.rfft(made.pressure))
    lines = np.fft.rfftfreq(len(made.pressure), 1 / RATE)
    outside = (lines < 59.9) | (lines > 240.1)
    assert spectrum[outside].max() < 1e-9 * spectrum.max()


def test_every_file_says_what_it_is(tmp_path: Path) -> None:
    paths = _written("run", tmp_path)
    for path in paths.values():
        data = path.read_bytes()
        assert b"LIST" in data[:64] and b"INFO" in data and LABEL.encode() in data and b"full scale is" in data
        assert int.from_bytes(data[4:8], "little") == len(data) - 8
    (about,) = tmp_path.glob("about_*.txt")
    text = about.read_text()
    assert "no assessment of hearing" in text and all(name in text for name in paths)
    assert "60-240 Hz only" in text


def test_what_cannot_be_heard_is_said() -> None:
    with pytest.raises(ResultError, match="above zero"):
        sounds((("a", solved_box.result()),), seconds=0.0)
    with pytest.raises(ResultError, match="did you mean 'left_ear'"):
        sounds((("a", solved_box.result()),), ("left_eer",))


def test_the_command(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    write_result(solved_box.result(), tmp_path / "a.h5")
    words = ["audio", str(tmp_path / "a.h5"), str(tmp_path / "out"), "--receiver", "left_ear", "--seconds", "1"]
    assert main(words) == 0
    assert {p.name for p in (tmp_path / "out").iterdir()} == {"left_ear_run_sound.wav", "about_left_ear_run_sound.txt"}
    write_result(_lined(), tmp_path / "b.h5")
    assert main([*words[:2], str(tmp_path / "b.h5"), str(tmp_path / "two"), "--seconds", "1"]) == 0
    assert len(list((tmp_path / "two").glob("*.wav"))) == 4
    assert "no assessment of hearing" in capsys.readouterr().err
