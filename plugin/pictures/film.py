"""Animations: pictures of one period of the phase, written as GIF or MP4; they start again where they end."""

from __future__ import annotations

import shutil
import subprocess
from collections.abc import Iterator, Sequence
from importlib import import_module
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np
import numpy.typing as npt
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from murmesh.plugin.describe import hertz, is_density
from murmesh.plugin.files import written
from murmesh.plugin.pictures.style import SIGNED_MAP
from murmesh.solver.errors import MissingLibraryError, ResultError
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Image = npt.NDArray[np.uint8]
FRAMES, PER_SECOND, PERIODS = 24, 12, 3
"""Pictures per period and per second; periods in an MP4, which does not start again by itself."""
FORMATS = (".gif", ".mp4")


def phases(frames: int = FRAMES) -> Floats:
    """wt (frames,) [rad] over one period. Raises ResultError for fewer than four."""
    if frames < 4:
        raise ResultError(f"{frames} pictures do not show a period; give at least 4")
    return np.asarray(2 * np.pi * np.arange(frames) / frames)


def strongest(pressure: Complex) -> Complex:
    """Of r pressures (k, r) whose mean squares add, the strongest one (k,): incoherent parts share no phase."""
    return np.asarray(pressure[:, int(np.nansum(np.abs(pressure) ** 2, axis=0).argmax())])


def strongest_words(pressure: Complex) -> str:
    """What the animation shows of the field, empty where it is all of it."""
    energy = np.nansum(np.abs(pressure) ** 2, axis=0)
    if len(energy) == 1 or not energy.sum():
        return ""
    part = 100 * energy.max() / energy.sum()
    return f"Of {len(energy)} incoherent parts the strongest is shown, {part:.0f} % of the mean square."


def amplitude_words(result: Result, line: float, load_case: str) -> str:
    """What is animated, at which line; a density's amplitude is that of its own bandwidth."""
    held = f", amplitudes of {result.load_case_of(load_case).bandwidth:g} Hz" if is_density(result, load_case) else ""
    return f"{hertz(line)} · p cos(ωt + phase), one period{held}"


def limit_of(pressure: Complex) -> float:
    """A rounded limit [Pa] of a signed scale, the same in all pictures: 1, 2 or 5 times a power of ten above the 99 % peak."""
    peak = float(np.nanquantile(np.abs(pressure), 0.99))
    if not peak > 0:
        return 1.0
    power = 10.0 ** np.floor(np.log10(peak))
    return float(next(m * power for m in (1.0, 2.0, 5.0, 10.0) if m * power >= peak * (1 - 1e-9)))


def picture(figure: Figure) -> Image:
    """A figure as an image (height, width, 3), both even as an encoder wants them."""
    canvas: Any = FigureCanvasAgg(figure)  # its methods carry no types
    canvas.draw()
    image = np.asarray(canvas.buffer_rgba())[..., :3]
    return np.ascontiguousarray(image[: image.shape[0] // 2 * 2, : image.shape[1] // 2 * 2])


def write(images: Iterator[Image], path: Path) -> Path:
    """Write the pictures of one period; the suffix of `path` says as what.

    Raises ResultError for another suffix, MissingLibraryError where an MP4 is wanted and no encoder is there.
    """
    path = Path(path)
    check_format(path)
    encode = _gif if path.suffix.lower() == ".gif" else _mp4
    with written(path) as scratch:
        encode(list(images), scratch)
    return path


def check_format(path: Path) -> None:
    """Raise what `write` would, before anything is computed."""
    if path.suffix.lower() not in FORMATS:
        raise ResultError(f"'{path.name}' is no animation this can write; end its name with {' or '.join(FORMATS)}")
    if path.suffix.lower() == ".mp4":
        encoder()


def _gif(images: Sequence[Image], path: Path) -> None:
    from PIL import Image as Pillow

    # one palette for all pictures, from the colours that mean something: others would flicker
    palette = Pillow.new("P", (1, 1))
    palette.putpalette(_palette())
    frames = [Pillow.fromarray(image).quantize(palette=palette, dither=Pillow.Dither.NONE) for image in images]
    frames[0].save(path, save_all=True, append_images=frames[1:], duration=round(1000 / PER_SECOND), loop=0)


def _palette() -> bytes:
    """256 colours: the signed map, and greys for words and lines."""
    signed = matplotlib.colormaps[SIGNED_MAP](np.linspace(0.0, 1.0, 208))[:, :3]
    grey = np.linspace(0.0, 1.0, 48)[:, None] * np.ones(3)
    return bytes(np.round(255 * np.concatenate([signed, grey])).astype(np.uint8))


def encoder() -> str:
    """The path of an MP4 encoder: imageio-ffmpeg's, or the system's ffmpeg."""
    try:
        return str(import_module("imageio_ffmpeg").get_ffmpeg_exe())
    except (ImportError, RuntimeError):
        found = shutil.which("ffmpeg")
    if found is None:
        raise MissingLibraryError(
            "no MP4 encoder is here; pip install imageio-ffmpeg (or apt-get install ffmpeg), or write a .gif instead"
        )
    return found


def _mp4(images: Sequence[Image], path: Path) -> None:
    height, width, _ = images[0].shape
    words = [encoder(), "-y", "-loglevel", "error", "-f", "rawvideo", "-pix_fmt", "rgb24", "-s", f"{width}x{height}"]
    words += ["-r", str(PER_SECOND), "-i", "-", "-an", "-pix_fmt", "yuv420p", "-crf", "20", str(path)]
    frames = b"".join(image.tobytes() for image in images) * PERIODS
    done = subprocess.run(words, input=frames, capture_output=True, check=False)
    if done.returncode:
        raise ResultError(f"the MP4 encoder failed: {done.stderr.decode(errors='replace').strip()}; write a .gif instead")
