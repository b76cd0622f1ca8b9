"""Animations: one period that closes, symmetric limits that stay, p cos(wt + phase) in the colours; a cure without encoder."""

from __future__ import annotations

import shutil
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import matplotlib
import numpy as np
import pytest
from matplotlib.figure import Figure
from PIL import Image

import solved_box
from murmesh.plugin.cli import main
from murmesh.plugin.pictures import PICTURES, cut_phase, film, surface_phase
from murmesh.plugin.pictures.style import SIGNED_MAP, look
from murmesh.solver.errors import MissingLibraryError, ResultError
from murmesh.solver.result import Result, write_result


@pytest.fixture(scope="module")
def result() -> Result:
    return solved_box.result()


def test_the_signed_colours_follow_the_phase(result: Result) -> None:
    """A field that is p = i everywhere: p cos(wt) parts are 0, -1, 0, 1 Pa at the quarters of a period."""
    uniform = solved_box.uniform_field(result, 1j)
    with look():
        frames = list(cut_phase.pictures(uniform, 120.0, limit=2.0, frames=4))
    seen = [_colour_of_the_cut(frame) for frame in frames]
    wanted = [matplotlib.colormaps[SIGNED_MAP](0.5 + 0.25 * value)[:3] for value in (0.0, -1.0, 0.0, 1.0)]
    assert np.allclose(seen, wanted, atol=0.02)
    assert np.abs(frames[0].astype(int) - frames[2]).max() <= 2


def _colour_of_the_cut(frame: film.Image) -> np.ndarray:
    """The commonest colour that is neither the page nor grey-white."""
    patch = frame[frame.shape[0] // 2 - 40 : frame.shape[0] // 2 + 40, 150:250].reshape(-1, 3)
    colours, counts = np.unique(patch, axis=0, return_counts=True)
    keep = (colours < 255).any(axis=1)
    return np.asarray(colours[keep][counts[keep].argmax()] / 255)


def test_a_view_turns_its_real_and_imaginary_parts() -> None:
    parts = np.zeros((2, 2, 3), dtype=np.uint8)
    parts[..., 0], parts[..., 1] = 128, 128 + 127  # p = i at full scale
    parts[1, 1, 2] = 255  # background
    view = surface_phase.Rendered(parts, np.full((2, 2, 3), 255, dtype=np.uint8))
    colour = matplotlib.colormaps[SIGNED_MAP]
    for turn, value in ((0.0, 0.5), (np.pi / 2, 0.0), (np.pi, 0.5), (1.5 * np.pi, 1.0)):
        seen = view.at(turn)
        assert np.allclose(seen[0, 0] / 255, colour(value)[:3], atol=0.02)
        assert np.all(seen[1, 1] == 255)


@pytest.mark.parametrize("name", ["cut_phase", "surface_phase"])
def test_a_gif_holds_one_period_and_starts_again(
    name: str, tmp_path: Path, result: Result, request: pytest.FixtureRequest
) -> None:
    if PICTURES[name].renders:
        request.getfixturevalue("rendering")
    path = PICTURES[name].make(result, tmp_path / "a.gif", frequency=120.0, frames=8)
    with Image.open(path) as image:
        assert image.n_frames == 8 and image.info["loop"] == 0 and image.width == 1400  # type: ignore[attr-defined]
        stills = []
        for k in range(8):
            image.seek(k)
            stills.append(np.asarray(image.convert("RGB"), dtype=np.int64))
    half = [np.abs(a - b).mean() for a, b in zip(stills, [*stills[1:], stills[0]], strict=True)]
    assert min(half) > 0.05  # every step moves, the last to the first too
    assert max(half) < 3 * min(half) + 5


def test_an_mp4_is_written_and_read_again(tmp_path: Path, result: Result) -> None:
    path = PICTURES["cut_phase"].make(result, tmp_path / "a.mp4", frequency=120.0, frames=6)
    done = subprocess.run([film.encoder(), "-i", str(path), "-f", "framemd5", "-"], capture_output=True, text=True, check=True)
    rows = [line for line in done.stdout.splitlines() if line and not line.startswith("#")]
    assert len(rows) == 6 * film.PERIODS


def test_without_an_encoder_the_cure_is_said(
    tmp_path: Path, result: Result, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setitem(sys.modules, "imageio_ffmpeg", None)
    monkeypatch.setattr(shutil, "which", lambda name: None)
    with pytest.raises(MissingLibraryError, match=r"pip install imageio-ffmpeg .* or write a \.gif instead"):
        PICTURES["cut_phase"].make(result, tmp_path / "a.mp4")
    write_result(result, tmp_path / "r.h5")
    assert main(["animate", str(tmp_path / "r.h5"), str(tmp_path / "a.mp4")]) == 2
    assert "no MP4 encoder" in capsys.readouterr().err


def test_what_cannot_be_animated_is_said(tmp_path: Path, result: Result) -> None:
    with pytest.raises(ResultError, match=r"end its name with \.gif or \.mp4"):
        PICTURES["cut_phase"].make(result, tmp_path / "a.avi")
    with pytest.raises(ResultError, match="at least 4"):
        PICTURES["cut_phase"].make(result, tmp_path / "a.gif", frames=2)


def test_limits_are_round_and_symmetric(result: Result) -> None:
    assert film.limit_of(np.array([0.034 + 0j])) == pytest.approx(0.05)
    assert film.limit_of(np.array([0.0j])) == 1.0
    with look():
        frame_figure: Figure = cut_phase.still(result, 120.0)[0]
    low, high = frame_figure.axes[-1].get_ylim()
    assert low == -high and high > 0


def test_incoherent_parts_show_the_strongest_and_say_so(result: Result) -> None:
    pressure = np.array([[1.0, 3.0], [1.0, 3.0]], dtype=np.complex128)
    assert np.all(film.strongest(pressure) == 3.0) and "90 %" in film.strongest_words(pressure)
    assert film.strongest_words(pressure[:, :1]) == ""
    quiet = replace(result, load_cases=result.load_cases)
    with look():
        said = [text.get_text() for text in cut_phase.still(quiet, 120.0, "idle")[0].texts]
    assert any("incoherent parts" in text for text in said)
