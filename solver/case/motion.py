"""How a surface moves: what was measured or computed, in the words of whoever gives it.

    v_s(x, f) = sum_m shape_m(x) amplitude_m(f)      complex peak normal velocity out of the fluid [m/s]

Each member says its quantity (velocity or acceleration), its amplitude (peak or rms) and which way is positive. People
give "positive = the surface moves into the air"; the solver wants velocity along the normal *out of* the fluid. The
conversion to peak velocity out of the fluid is made here, in `Motion.outward`, and nowhere else.
"""

from __future__ import annotations

from typing import ClassVar

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.expression import parse
from murmesh.solver.case.fields import Declared, kind, quantity
from murmesh.solver.case.spectrum import Constant, Spectrum, as_spectrum
from murmesh.solver.errors import FieldError, RangeError

Complex = npt.NDArray[np.complex128]
Float = npt.NDArray[np.float64]

QUANTITY = ("velocity", "acceleration")
AMPLITUDE = ("peak", "rms")
POSITIVE = ("into_air", "out_of_fluid")


class Motion(Declared):
    """Family of surface motions."""

    has_phase: ClassVar[bool] = True
    measure: str
    positive: str

    def given(self, f: Float) -> Complex:
        """Peak amplitudes (nf, m) of the quantity and in the direction the giver used."""
        raise NotImplementedError

    def shape(self) -> str | Float | None:
        """Where the amplitudes stand: None (uniform), an expression in x, y, z, or points (m, 3) [m]."""
        return None

    def outward(self, f: Float) -> Complex:
        """v_s = -(+-) given / (i w for accelerations): peak velocity out of the fluid, (nf, m) [m/s]."""
        amplitude = self.given(f)
        if self.measure == "acceleration":
            amplitude = amplitude / (2j * np.pi * f[:, None])
        return -amplitude if self.positive == "into_air" else amplitude


def _peak(values: Complex, amplitude: str) -> Complex:
    return values * np.sqrt(2.0) if amplitude == "rms" else values


@kind("uniform")
class Uniform(Motion):
    """The whole surface moves as one: a number, or a complex spectrum."""

    value: complex | Spectrum = quantity(help="normal velocity [m/s] or acceleration [m/s2], complex", unit="m/s")
    measure: str = quantity(help="what the value is", choices=QUANTITY, default="velocity")
    amplitude: str = quantity(help="peak or rms amplitude", choices=AMPLITUDE, default="peak")
    positive: str = quantity(help="which way is positive", choices=POSITIVE, default="into_air")

    def given(self, f: Float) -> Complex:
        return _peak(as_spectrum(self.value).at(f)[:, None], self.amplitude)

    @classmethod
    def example(cls) -> Uniform:
        return cls(Constant(1e-3 + 0.5e-3j), measure="velocity", amplitude="peak")


@kind("autospectrum")
class Autospectrum(Motion):
    """A measured autospectrum without phase; it can only be combined incoherently or by a cross-spectral matrix."""

    has_phase = False

    value: complex | Spectrum = quantity(help="real: peak, rms or mean square per hertz (see form)", unit="m/s")
    form: str = quantity(help="what the value is", choices=("peak", "rms", "psd"))
    measure: str = quantity(help="what was measured", choices=QUANTITY, default="velocity")
    positive: str = quantity(help="which way is positive (no meaning without phase)", choices=POSITIVE, default="into_air")

    def given(self, f: Float) -> Complex:
        values = as_spectrum(self.value).at(f)
        if np.any(np.abs(values.imag) > 0) or np.any(values.real < 0):
            raise FieldError("an autospectrum holds real values >= 0; give complex spectra as a 'uniform' motion")
        if self.form == "psd":
            values = np.sqrt(values.real).astype(np.complex128)
        return _peak(values[:, None], "peak" if self.form == "peak" else "rms")

    @classmethod
    def example(cls) -> Autospectrum:
        return cls(Constant(1e-8), form="psd")


@kind("shape")
class Shape(Motion):
    """A shape over the surface, given as an expression in x, y, z [m], times a spectrum."""

    expression: str = quantity(help="shape over the surface, e.g. sin(pi*x/1.7)*cos(pi*y/1.5)")
    value: complex | Spectrum = quantity(help="amplitude where the expression is 1", unit="m/s")
    measure: str = quantity(help="what the value is", choices=QUANTITY, default="velocity")
    amplitude: str = quantity(help="peak or rms amplitude", choices=AMPLITUDE, default="peak")
    positive: str = quantity(help="which way is positive", choices=POSITIVE, default="into_air")

    def validate(self) -> None:
        parse(self.expression)

    def shape(self) -> str:
        return self.expression

    def given(self, f: Float) -> Complex:
        return _peak(as_spectrum(self.value).at(f)[:, None], self.amplitude)

    @classmethod
    def example(cls) -> Shape:
        return cls("sin(pi*x)*cos(y)", Constant(1e-3))


@kind("scan")
class Scan(Motion):
    """Complex values at scan points that need not match the mesh; interpolated in space and linearly over frequency."""

    points: npt.NDArray[np.float64] = quantity(help="scan points, (m, 3)", unit="m")
    frequencies: npt.NDArray[np.float64] = quantity(help="frequencies, increasing, (nf,)", unit="Hz", positive=True)
    values: npt.NDArray[np.complex128] = quantity(help="complex values, (nf, m)", unit="m/s")
    measure: str = quantity(help="what the values are", choices=QUANTITY, default="velocity")
    amplitude: str = quantity(help="peak or rms amplitude", choices=AMPLITUDE, default="peak")
    positive: str = quantity(help="which way is positive", choices=POSITIVE, default="into_air")

    def validate(self) -> None:
        if self.points.ndim != 2 or self.points.shape[1] != 3 or len(self.points) < 3:
            raise FieldError(f"scan points must be (m, 3) with m >= 3, got {self.points.shape}; give x, y, z per point")
        if self.values.shape != (len(self.frequencies), len(self.points)):
            raise FieldError(
                f"scan values have shape {self.values.shape}, expected (frequencies, points) = "
                f"({len(self.frequencies)}, {len(self.points)}); transpose the table or add what is missing"
            )
        if np.any(np.diff(self.frequencies) <= 0):
            raise FieldError("scan frequencies must increase strictly; sort them and remove duplicates")

    def shape(self) -> Float:
        return self.points

    def given(self, f: Float) -> Complex:
        low, high = self.frequencies[0], self.frequencies[-1]
        if np.any(f < low * (1 - 1e-9)) or np.any(f > high * (1 + 1e-9)):
            raise RangeError(
                f"the scan holds {low:g} .. {high:g} Hz, but {f.min():g} .. {f.max():g} Hz is asked; a scan is never "
                "extrapolated: narrow the sweep or measure the missing lines"
            )
        columns = [np.interp(f, self.frequencies, self.values[:, j]) for j in range(len(self.points))]
        return _peak(np.stack(columns, axis=1), self.amplitude)

    @classmethod
    def example(cls) -> Scan:
        points = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [1, 1, 0]])
        return cls(points, np.array([20.0, 1000.0]), np.full((2, 4), 1e-3 + 1e-4j))
