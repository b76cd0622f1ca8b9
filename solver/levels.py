"""Levels, frequency weightings and fractional-octave bands.

    L = 10 lg( mean square / p0^2 ),   p0 = 20 uPa

Weightings: IEC 61672-1:2013, annex E. Bands: IEC 61260-1:2014, base ten. References: ISO 1683:2015.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from murmesh.solver.errors import FieldError, nearest

Float = npt.NDArray[np.float64]
P0 = 2e-5
W0 = 1e-12
"""Reference sound power [W]."""
_F1, _F2, _F3, _F4 = 20.598997, 107.65265, 737.86223, 12194.217
_NOMINAL = (10, 12.5, 16, 20, 25, 31.5, 40, 50, 63, 80)


def level(mean_square: npt.ArrayLike, reference: float = P0) -> Float:
    """10 lg(mean square / reference^2) [dB]; -inf where it is zero."""
    with np.errstate(divide="ignore"):
        return np.asarray(10 * np.log10(np.asarray(mean_square, dtype=np.float64) / reference**2))


def power_level(power: npt.ArrayLike) -> Float:
    """10 lg(W / 1 pW) [dB]; -inf where it is zero."""
    return level(power, np.sqrt(W0))


def sum_levels(levels: npt.ArrayLike) -> float:
    """10 lg sum 10^(L/10) [dB]; -inf for nothing, or for silences."""
    return float(level(np.sum(10 ** (np.asarray(levels, dtype=np.float64) / 10)), 1.0))


def A_weighting(f: npt.ArrayLike) -> Float:
    """A-weighting [dB], zero at 1 kHz."""
    return _a(np.asarray(f, dtype=np.float64)) - _a(np.array(1000.0))


def C_weighting(f: npt.ArrayLike) -> Float:
    """C-weighting [dB], zero at 1 kHz."""
    return _c(np.asarray(f, dtype=np.float64)) - _c(np.array(1000.0))


def _c(f: Float) -> Float:
    return np.asarray(20 * np.log10(_F4**2 * f**2 / ((f**2 + _F1**2) * (f**2 + _F4**2))))


def _a(f: Float) -> Float:
    return np.asarray(_c(f) + 20 * np.log10(f**2 / np.sqrt((f**2 + _F2**2) * (f**2 + _F3**2))))


def _none(f: npt.ArrayLike) -> Float:
    return np.zeros(np.shape(f))


def weighting(name: str, f: npt.ArrayLike) -> Float:
    """The weighting called A, C or Z [dB]."""
    known: dict[str, Callable[[npt.ArrayLike], Float]] = {"A": A_weighting, "C": C_weighting, "Z": _none}
    if name not in known:
        raise FieldError(f"no frequency weighting is called '{name}'; {nearest(name, known)}")
    return known[name](f)


@dataclass(frozen=True)
class Band:
    """A frequency band: its nominal name and its exact mid-band and edge frequencies [Hz]."""

    nominal: str
    mid: float
    lower: float
    upper: float


def _nominal(exact: float) -> str:
    decade = 10 ** np.floor(np.log10(exact) - 1 + 1e-9)
    value = min((n * decade for n in (*_NOMINAL, 100)), key=lambda n: abs(np.log(n / exact)))
    return f"{value:g}"


def _bands(low: float, high: float, per_octave: int) -> tuple[Band, ...]:
    """Bands that overlap low .. high; b odd: f_m = 1000 G^(x/b), edges f_m G^(-+1/(2b)), G = 10^(3/10)."""
    g = 10**0.3
    first, last = (int(np.floor(np.log(f / 1000) / np.log(g) * per_octave + 0.5)) for f in (low, high))
    half = g ** (1 / (2 * per_octave))
    mids = [1000 * g ** (x / per_octave) for x in range(first, last + 1)]
    return tuple(Band(_nominal(mid), mid, mid / half, mid * half) for mid in mids)


def third_octaves(low: float, high: float) -> tuple[Band, ...]:
    """Third-octave bands that overlap low .. high [Hz]."""
    return _bands(low, high, 3)


def octaves(low: float, high: float) -> tuple[Band, ...]:
    """Octave bands that overlap low .. high [Hz]."""
    return _bands(low, high, 1)


def band_energy(
    frequencies: Float, mean_square: Float, bands: Sequence[Band], spectrum: str, weighting_name: str = "Z"
) -> tuple[Float, Float]:
    """Weighted mean square per band (b,) [Pa2] and the part of each band that the sweep covers (b,).

    spectrum "tones": mean_square (nf,) [Pa2] of each line, summed; the weighting is that at the tone's own frequency.
    spectrum "density": mean_square (nf,) [Pa2/Hz], integrated as a piecewise linear function over band and sweep.
    """
    weighted = mean_square * 10 ** (weighting(weighting_name, frequencies) / 10)
    if spectrum == "tones":
        inside = [(frequencies >= band.lower) & (frequencies < band.upper) for band in bands]
        energy = [float(weighted[mask].sum()) for mask in inside]
    elif spectrum == "density":
        energy = [_integral(frequencies, weighted, band) for band in bands]
    else:
        raise FieldError(f"spectrum '{spectrum}' is not known; {nearest(spectrum, ('tones', 'density'))}")
    low, high = frequencies[0], frequencies[-1]
    covered = [max(min(high, b.upper) - max(low, b.lower), 0.0) / (b.upper - b.lower) for b in bands]
    return np.asarray(energy, dtype=np.float64), np.asarray(covered)


def overall_energy(frequencies: Float, mean_square: Float, spectrum: str, weighting_name: str = "Z") -> float:
    """Weighted mean square over the whole sweep [Pa2]; `spectrum` as in `band_energy`."""
    low, high = float(frequencies[0]), float(frequencies[-1])
    # the upper edge of a band is not part of it, the last line of the sweep is
    whole = Band("overall", float(np.sqrt(low * high)), low, high * (1 + 1e-9))
    return float(band_energy(frequencies, mean_square, [whole], spectrum, weighting_name)[0][0])


def _integral(f: Float, density: Float, band: Band) -> float:
    low, high = max(band.lower, float(f[0])), min(band.upper, float(f[-1]))
    if not low < high:
        return 0.0
    inner = f[(f > low) & (f < high)]
    points = np.concatenate([[low], inner, [high]])
    return float(np.trapezoid(np.interp(points, f, density), points))


def schroeder_frequency(reverberation_time: float, volume: float) -> float:
    """2000 sqrt(T60/V) [Hz], T60 in s and V in m3: above it report band averages (Schroeder, JASA 99 (1996) 3240)."""
    return float(2000 * np.sqrt(reverberation_time / volume))
