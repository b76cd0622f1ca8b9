"""Receiver spectra as sound, to hear a difference: WAV files, before and after with one common gain.

tones      x(t) = sum_f sqrt(2 S_f) cos(2 pi f t + phase_f)           S_f mean square of a line [Pa2]
density    x(t) = sum_k sqrt(2 S(f_k) df) cos(2 pi f_k t + phase_k)   S(f) [Pa2/Hz], df = 1 / duration

A tone keeps the computed phase of its mean pressure over the receiver's samples; a density has random phases from a fixed
seed, the same for every file, so that two files differ by what was computed only. One factor turns pascals into full scale
for all files of a call; each file says it (RIFF INFO list, "Multimedia Programming Interface and Data
Specifications 1.0", 1991).
"""

from __future__ import annotations

import re
import struct
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from murmesh.plugin.describe import is_density, plain
from murmesh.plugin.fields import listed_receivers
from murmesh.plugin.files import written
from murmesh.solver.errors import ResultError
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
RATE, SECONDS = 48_000, 5.0  # samples per second, duration
LABEL = (
    "Relative and band-limited: synthesised from a computed spectrum, to hear a difference. Not a measurement, not a "
    "recording, and no assessment of hearing or exposure. Set a low volume first: the playback level is what you make it."
)
_HEADROOM = 0.89  # of full scale, 1 dB below it
_FULL = 2**23 - 1  # 24 bits, so that a file that is much quieter than the other keeps its detail
_SEED = 20260101


@dataclass(frozen=True, eq=False)
class Sound:
    """Pressures (n,) [Pa] over time at one receiver; `name` is which result they come from."""

    name: str
    receiver: str
    load_case: str
    span: tuple[float, float]
    pressure: Floats

    @property
    def file_name(self) -> str:
        return "_".join(re.sub(r"[^\w.-]+", "-", part) for part in (self.receiver, self.load_case, self.name)) + ".wav"


def sound(result: Result, receiver: str, load_case: str = "", name: str = "sound", seconds: float = SECONDS) -> Sound:
    """The pressure over time at a receiver. Raises ResultError where the sweep reaches beyond half the sampling rate."""
    f = result.frequencies
    if f[-1] >= RATE / 2:
        raise ResultError(f"the sweep reaches {f[-1]:g} Hz, but {RATE} samples per second hold less than {RATE // 2} Hz")
    square = result.mean_square(receiver, load_case)
    if is_density(result, load_case):
        pressure = _noise(f, square, seconds)
    else:
        pressure = _tones(f, np.sqrt(2 * square), _phases(result, receiver, load_case), seconds)
    return Sound(name, receiver, result.load_case(load_case).name, (float(f[0]), float(f[-1])), pressure)


def _phases(result: Result, receiver: str, load_case: str) -> Floats:
    """Phase (nf,) [rad] of the strongest pressure, averaged over the receiver's samples."""
    held, index = result.load_case(load_case), result.samples(receiver)
    mix = result.load_case_of(load_case).combination.factors(result.frequencies, len(held.loads))
    mean = np.einsum("s,fsl,flr->fr", result.sample_weight[index], held.contributions[:, index], mix)
    strongest = np.abs(mean).argmax(axis=1)
    return np.asarray(np.angle(mean[np.arange(len(mean)), strongest]))


def _tones(f: Floats, amplitude: Floats, phase: Floats, seconds: float) -> Floats:
    t = np.arange(round(seconds * RATE)) / RATE
    out = np.zeros(len(t))
    for tone in np.flatnonzero(amplitude > 0):
        out += amplitude[tone] * np.cos(2 * np.pi * f[tone] * t + phase[tone])
    return out


def _noise(f: Floats, density: Floats, seconds: float) -> Floats:
    count = round(seconds * RATE)
    lines = np.fft.rfftfreq(count, 1 / RATE)
    power = np.interp(lines, f, density, left=0.0, right=0.0)
    phase = np.random.default_rng(_SEED).uniform(0.0, 2 * np.pi, len(lines))
    return np.asarray(np.fft.irfft(np.sqrt(power / (2 * seconds)) * np.exp(1j * phase) * count, count))


def sounds(
    results: Sequence[tuple[str, Result]], receivers: Sequence[str] = (), load_case: str = "", seconds: float = SECONDS
) -> list[Sound]:
    """Every receiver (none named: all of the first result) in every result (with its name), in that order."""
    if seconds <= 0:
        raise ResultError(f"a sound of {seconds:g} s has nothing to hear; give a duration above zero")
    listed = listed_receivers(results[0][1], receivers)
    made = [sound(result, receiver, load_case, name, seconds) for receiver in listed for name, result in results]
    if not any(item.pressure.any() for item in made):
        raise ResultError("every receiver is silent in this load case, so there is nothing to hear; choose another")
    return made


def write_sounds(made: Sequence[Sound], folder: Path) -> list[Path]:
    """Write a WAV per sound with one common gain, and a text that says what they are."""
    folder.mkdir(parents=True, exist_ok=True)
    largest = max(float(np.abs(item.pressure).max()) for item in made)
    gain = _HEADROOM / largest
    paths = [_write(item, gain, folder / item.file_name) for item in made]
    about = folder / f"about_{Path(made[0].file_name).stem}.txt"
    with written(about) as scratch:
        listed = "\n".join(f"{path.name}: {_about(item, gain)}" for path, item in zip(paths, made, strict=True))
        scratch.write_text(f"{LABEL}\n\n{listed}\n", encoding="utf-8")
    return [*paths, about]


def _about(item: Sound, gain: float) -> str:
    return (
        f"receiver '{item.receiver}', load case '{item.load_case}', {item.name}, {item.span[0]:g}-{item.span[1]:g} Hz only; "
        f"full scale is {1 / gain:.4g} Pa in every file written together"
    )


def _write(item: Sound, gain: float, path: Path) -> Path:
    """PCM, one channel, 24 bits, with the label in the file's INFO list."""
    samples = np.round(item.pressure * gain * _FULL).astype("<i4")
    frames = samples.view(np.uint8).reshape(-1, 4)[:, :3].tobytes()
    info = b"INFO" + _chunk(b"INAM", _text(_about(item, gain))) + _chunk(b"ICMT", _text(LABEL)) + _chunk(b"ISFT", b"murmesh\0")
    shape = _chunk(b"fmt ", struct.pack("<HHIIHH", 1, 1, RATE, 3 * RATE, 3, 24))
    body = b"WAVE" + shape + _chunk(b"LIST", info) + _chunk(b"data", frames)
    with written(path) as scratch:
        scratch.write_bytes(_chunk(b"RIFF", body))
    return path


def _chunk(name: bytes, body: bytes) -> bytes:
    return name + struct.pack("<I", len(body)) + body + b"\0" * (len(body) % 2)


def _text(text: str) -> bytes:
    return plain(text).encode("ascii", "replace") + b"\0"
