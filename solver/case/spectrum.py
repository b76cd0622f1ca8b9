"""A quantity over frequency: a number, a table, a power law, or lines.

    at(f) -> complex values (nf,) at the frequencies f (nf,) [Hz]

A field that may be a number or a spectrum is declared `complex | Spectrum` and read through `as_spectrum`.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.fields import Declared, kind, quantity
from murmesh.solver.errors import FieldError, RangeError

Complex = npt.NDArray[np.complex128]
Float = npt.NDArray[np.float64]
SAME_LINE = 1e-6
"""Two frequencies closer than this (relative) are one line."""


class Spectrum(Declared):
    """Family of quantities over frequency."""

    def at(self, f: Float) -> Complex:
        """Values (nf,) at f (nf,) [Hz]."""
        raise NotImplementedError


@kind("constant")
class Constant(Spectrum):
    """The same value at every frequency."""

    value: complex = quantity(help="the value")

    def at(self, f: Float) -> Complex:
        return np.full(len(f), self.value, dtype=np.complex128)

    @classmethod
    def example(cls) -> Constant:
        return cls(1.5 - 0.5j)


@kind("table")
class Table(Spectrum):
    """A table, linear in real and imaginary part between its frequencies, never extrapolated unless it says so."""

    frequencies: npt.NDArray[np.float64] = quantity(help="increasing frequencies, (n,)", unit="Hz", positive=True)
    values: npt.NDArray[np.complex128] = quantity(help="complex values, (n,)")
    extrapolate: bool = quantity(help="hold the end values outside the table", default=False)

    def validate(self) -> None:
        _check_table(self.frequencies, self.values)

    def at(self, f: Float) -> Complex:
        low, high = float(self.frequencies[0]), float(self.frequencies[-1])
        outside = (f < low * (1 - SAME_LINE)) | (f > high * (1 + SAME_LINE))
        if np.any(outside) and not self.extrapolate:
            raise RangeError(
                f"the table holds {low:g} .. {high:g} Hz, but {f[outside][0]:g} Hz is asked; a table is not "
                "extrapolated: narrow the sweep, add the missing rows, or set extrapolate = true to hold its end values"
            )
        return np.asarray(np.interp(f, self.frequencies, self.values), dtype=np.complex128)

    @classmethod
    def example(cls) -> Table:
        return cls(np.array([10.0, 1000.0]), np.array([1.0 - 1j, 2.0 + 0j]))


@kind("power_law")
class PowerLaw(Spectrum):
    """A value at one frequency that rises or falls by so many dB per octave."""

    value: complex = quantity(help="value at the reference frequency")
    reference: float = quantity(help="reference frequency", unit="Hz", positive=True)
    db_per_octave: float = quantity(help="slope, e.g. -6", unit="dB")

    def at(self, f: Float) -> Complex:
        octaves = np.log2(f / self.reference)
        return np.asarray(self.value * 10 ** (self.db_per_octave * octaves / 20), dtype=np.complex128)

    @classmethod
    def example(cls) -> PowerLaw:
        return cls(1e-3 + 0j, 95.0, -6.0)


@kind("lines")
class Lines(Spectrum):
    """A line spectrum: its values at its own frequencies, zero at every other."""

    frequencies: npt.NDArray[np.float64] = quantity(help="increasing frequencies, (n,)", unit="Hz", positive=True)
    values: npt.NDArray[np.complex128] = quantity(help="complex values, (n,)")

    def validate(self) -> None:
        _check_table(self.frequencies, self.values)

    def at(self, f: Float) -> Complex:
        near = np.abs(self.frequencies[None, :] - f[:, None]) <= SAME_LINE * f[:, None]
        return np.asarray(near @ self.values, dtype=np.complex128)

    @classmethod
    def example(cls) -> Lines:
        return cls(np.array([95.0, 190.0]), np.array([1e-3 + 0j, 5e-4 + 1e-4j]))


def as_spectrum(value: complex | Spectrum) -> Spectrum:
    """A number as a constant spectrum; a spectrum as it is."""
    return value if isinstance(value, Spectrum) else Constant(complex(value))


def _check_table(frequencies: Float, values: Complex) -> None:
    if frequencies.ndim != 1 or len(frequencies) == 0 or values.shape != frequencies.shape:
        raise FieldError(
            f"a table needs as many values as frequencies, at least one: got {frequencies.shape} and {values.shape}"
        )
    if np.any(np.diff(frequencies) <= 0):
        raise FieldError("table frequencies must increase strictly; sort the rows and remove duplicates")
