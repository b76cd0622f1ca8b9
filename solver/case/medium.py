"""Media and their losses, declared once.

A medium gives a complex density rho(f) and speed c(f); damping is stated as it is measured and enters as
k^2 = (w/c)^2 (1 - i eta) in the volume, or as an admittance of otherwise hard walls.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.fields import Declared, kind, quantity
from murmesh.solver.case.porous import Fluid, Miki, PorousLaw
from murmesh.solver.case.spectrum import Constant, Spectrum, as_spectrum
from murmesh.solver.case.wall import absorption_admittance
from murmesh.solver.errors import FieldError

Complex = npt.NDArray[np.complex128]
Float = npt.NDArray[np.float64]
ZERO_CELSIUS = 273.15
GAS_CONSTANT = 8.314462618
DRY_AIR, WATER_VAPOUR = 28.9647e-3, 18.01528e-3  # molar masses [kg/mol]
NEPER = 20 / np.log(10)  # dB


class Medium(Declared):
    """Family of media."""

    @property
    def reference(self) -> Fluid:
        """Real reference values: what `rho_c` units and mesh sizes refer to."""
        raise NotImplementedError

    def rho(self, f: Float) -> Complex:
        """Density (nf,) [kg/m3]."""
        return np.full(len(f), self.reference.density, dtype=np.complex128)

    def c(self, f: Float) -> Complex:
        """Speed of sound (nf,) [m/s]."""
        return np.full(len(f), self.reference.speed, dtype=np.complex128)

    def warnings(self, f: Float) -> tuple[str, ...]:
        return ()


@kind("air")
class Air(Medium):
    """Humid air: ideal gas mixture; speed by Cramer (JASA 93 (1993) 2510, eq. 15; coefficients from memory)."""

    temperature: float = quantity(help="temperature", unit="degC", low=-40.0, high=80.0, default=20.0)
    pressure: float = quantity(help="static pressure", unit="Pa", low=3e4, high=2e5, default=101325.0)
    humidity: float = quantity(help="relative humidity", unit="%", low=0.0, high=100.0, default=50.0)

    @property
    def reference(self) -> Fluid:
        kelvin = self.temperature + ZERO_CELSIUS
        # Sutherland's law, coefficients of common practice
        viscosity = 1.716e-5 * (kelvin / ZERO_CELSIUS) ** 1.5 * (ZERO_CELSIUS + 110.4) / (kelvin + 110.4)
        fraction = _vapour_fraction(self.temperature, self.pressure, self.humidity)
        molar = DRY_AIR + fraction * (WATER_VAPOUR - DRY_AIR)
        density = self.pressure * molar / (GAS_CONSTANT * kelvin)
        speed = _cramer(self.temperature, self.pressure, fraction)
        return Fluid(density, speed, viscosity, 0.71, 1.4, self.pressure)

    def warnings(self, f: Float) -> tuple[str, ...]:
        if 0 <= self.temperature <= 30 and 75e3 <= self.pressure <= 102e3:
            return ()
        return (
            "the speed of sound in air holds for 0 .. 30 degC and 75 .. 102 kPa (Cramer, JASA 93 (1993) 2510); "
            f"{self.temperature:g} degC, {self.pressure / 1e3:g} kPa lies outside",
        )

    @classmethod
    def example(cls) -> Air:
        return cls(23.0, 100000.0, 40.0)


def _vapour_fraction(t: float, pressure: float, humidity: float) -> float:
    """Mole fraction of water vapour (Cramer 1993; saturation pressure of Giacomo, Metrologia 18 (1982) 33)."""
    kelvin = t + ZERO_CELSIUS
    saturation = np.exp(1.2811805e-5 * kelvin**2 - 1.9509874e-2 * kelvin + 34.04926034 - 6.3536311e3 / kelvin)
    enhancement = 1.00062 + 3.14e-8 * pressure + 5.6e-7 * t**2
    return float(humidity / 100 * enhancement * saturation / pressure)


def _cramer(t: float, p: float, x_w: float, x_c: float = 314e-6) -> float:
    """Speed of sound in air [m/s], Cramer 1993, eq. (15)."""
    return float(
        331.5024 + 0.603055 * t - 0.000528 * t**2
        + (51.471935 + 0.1495874 * t - 0.000782 * t**2) * x_w
        + (-1.82e-7 + 3.73e-8 * t - 2.93e-10 * t**2) * p
        + (-85.20931 - 0.228525 * t + 5.91e-5 * t**2) * x_c
        - 2.835149 * x_w**2 - 2.15e-13 * p**2 + 29.179762 * x_c**2 + 0.000486 * x_w * p * x_c
    )  # fmt: skip


@kind("water")
class Water(Medium):
    """Fresh water by Marczak (JASA 102 (1997) 2776), sea water by Mackenzie (JASA 70 (1981) 807).

    Coefficients from memory.
    Density: Kell (J. Chem. Eng. Data 20 (1975) 97), plus 0.77 kg/m3 per unit of salinity (common practice, no source).
    """

    temperature: float = quantity(help="temperature", unit="degC", low=0.0, high=95.0, default=15.0)
    salinity: float = quantity(help="salinity; 0 for fresh water", unit="g/kg", low=0.0, high=42.0, default=0.0)
    depth: float = quantity(help="depth (sea water only)", unit="m", low=0.0, high=8000.0, default=0.0)

    def validate(self) -> None:
        if self.salinity == 0 and self.depth > 0:
            raise FieldError("depth is only known for sea water; give a salinity, or leave the depth at 0")
        if self.salinity > 0 and self.temperature > 30:
            raise FieldError("sea water is covered from 0 to 30 degC; give the density and speed as medium 'fluid'")

    @property
    def reference(self) -> Fluid:
        t = self.temperature
        kell = (999.83952, 16.945176, -7.9870401e-3, -46.170461e-6, 105.56302e-9, -280.54253e-12)
        density = _polynomial(kell, t) / (1 + 16.879850e-3 * t) + 0.77 * self.salinity
        return Fluid.consistent(density, self._speed(), viscosity=1.0e-3, prandtl=7.0, heat_ratio=1.007)

    def warnings(self, f: Float) -> tuple[str, ...]:
        if self.salinity == 0 or (2 <= self.temperature <= 30 and 25 <= self.salinity <= 40):
            return ()
        return (
            "the speed of sound in sea water holds for 2 .. 30 degC and 25 .. 40 g/kg (Mackenzie, JASA 70 (1981) 807); "
            f"{self.temperature:g} degC, {self.salinity:g} g/kg lies outside",
        )

    def _speed(self) -> float:
        t, s, d = self.temperature, self.salinity, self.depth
        if s == 0:
            return _polynomial((1402.385, 5.038813, -5.799136e-2, 3.287156e-4, -1.398845e-6, 2.787860e-9), t)
        return (
            _polynomial((1448.96, 4.591, -5.304e-2, 2.374e-4), t)
            + 1.340 * (s - 35) + 1.630e-2 * d + 1.675e-7 * d**2 - 1.025e-2 * t * (s - 35) - 7.139e-13 * t * d**3
        )  # fmt: skip

    @classmethod
    def example(cls) -> Water:
        return cls(20.0)


def _polynomial(coefficients: tuple[float, ...], t: float) -> float:
    return float(np.polynomial.polynomial.polyval(t, coefficients))


@kind("fluid")
class GivenFluid(Medium):
    """Any fluid of given density and speed."""

    density: float = quantity(help="density", unit="kg/m3", positive=True)
    speed: float = quantity(help="speed of sound", unit="m/s", positive=True)

    @property
    def reference(self) -> Fluid:
        return Fluid.consistent(self.density, self.speed)

    @classmethod
    def example(cls) -> GivenFluid:
        return cls(1.84, 268.0)


@kind("porous")
class PorousMedium(Medium):
    """A volume of porous material whose frame is at rest, as an equivalent fluid saturated with the given fluid."""

    law: PorousLaw = quantity(help="porous law")
    density: float = quantity(help="density of the saturating fluid", unit="kg/m3", positive=True, default=1.205)
    speed: float = quantity(help="speed of sound of the saturating fluid", unit="m/s", positive=True, default=343.0)

    @property
    def reference(self) -> Fluid:
        return Fluid.consistent(self.density, self.speed)

    def rho(self, f: Float) -> Complex:
        return self.law.effective(f, self.reference)[0]

    def c(self, f: Float) -> Complex:
        density, modulus = self.law.effective(f, self.reference)
        return np.asarray(np.sqrt(modulus / density))

    def warnings(self, f: Float) -> tuple[str, ...]:
        return self.law.warnings(f)

    @classmethod
    def example(cls) -> PorousMedium:
        return cls(Miki.example())


# ---------------------------------------------------------------------------------------------------------------------
# damping


class Damping(Declared):
    """Family of losses, as they are measured."""

    def loss_factor(self, f: Float, medium: Medium) -> Float:
        """eta (nf,) in k^2 = (w/c)^2 (1 - i eta)."""
        return np.zeros(len(f))

    def hard_wall_admittance(self, f: Float, fluid: Fluid) -> Complex:
        """Y (nf,) of walls that are otherwise hard."""
        return np.zeros(len(f), dtype=np.complex128)


def damped(medium: Medium, damping: Damping, f: Float) -> tuple[Complex, Complex]:
    """rho (nf,) and c (nf,) with losses, c -> c / sqrt(1 - i eta)."""
    return medium.rho(f), np.asarray(medium.c(f) / np.sqrt(1 - 1j * damping.loss_factor(f, medium)))


@kind("none")
class NoDamping(Damping):
    """No losses are stated. Resonance peaks are then unbounded; the check warns."""

    @classmethod
    def example(cls) -> NoDamping:
        return cls()


@kind("loss_factor")
class LossFactor(Damping):
    """A loss factor eta of the fluid."""

    value: float | Spectrum = quantity(help="loss factor", low=0.0, high=1.0)

    def loss_factor(self, f: Float, medium: Medium) -> Float:
        return _real("loss factor", self.value, f)

    @classmethod
    def example(cls) -> LossFactor:
        return cls(0.02)


@kind("reverberation_time")
class ReverberationTime(Damping):
    """Reverberation time, eta = 2.2 / (f T60) (energy decays by 60 dB, ln(10^6)/(2 pi) = 2.2)."""

    value: float | Spectrum = quantity(help="T60, number or table over frequency", unit="s", positive=True)

    def loss_factor(self, f: Float, medium: Medium) -> Float:
        time = _real("reverberation time", self.value, f)
        if np.any(time == 0):
            raise FieldError(f"a reverberation time of zero at {f[time == 0][0]:g} Hz has no loss factor; correct the table")
        return np.asarray(2.2 / (f * time))

    @classmethod
    def example(cls) -> ReverberationTime:
        return cls(Constant(0.4 + 0j))


@kind("air_absorption")
class AirAbsorption(Damping):
    """Atmospheric absorption (ISO 9613-1), k = w/c - i alpha; what is not given is that of the region's air."""

    temperature: float | None = quantity(
        help="temperature (default: that of the region's air)", unit="degC", low=-40.0, high=80.0, default=None
    )
    pressure: float | None = quantity(
        help="static pressure (default: that of the region's air)", unit="Pa", low=3e4, high=2e5, default=None
    )
    humidity: float | None = quantity(
        help="relative humidity (default: that of the region's air)", unit="%", low=0.0, high=100.0, default=None
    )

    def air(self, medium: Medium) -> Air:
        """The air that absorbs: the medium if it is air, ordinary air otherwise, with the fields that are given."""
        given = {"temperature": self.temperature, "pressure": self.pressure, "humidity": self.humidity}
        own = medium if isinstance(medium, Air) else Air()
        return own.with_(**{name: value for name, value in given.items() if value is not None})

    def loss_factor(self, f: Float, medium: Medium) -> Float:
        air = self.air(medium)
        alpha = air_absorption(f, air.temperature, air.pressure, air.humidity) / NEPER
        return np.asarray(2 * alpha * medium.reference.speed / (2 * np.pi * f))

    @classmethod
    def example(cls) -> AirAbsorption:
        return cls()


@kind("wall_absorption")
class WallAbsorption(Damping):
    """Residual absorption of otherwise hard walls, as a normal-incidence coefficient; a real admittance."""

    coefficient: float | Spectrum = quantity(help="normal-incidence absorption coefficient", low=0.0, high=1.0)

    def hard_wall_admittance(self, f: Float, fluid: Fluid) -> Complex:
        return absorption_admittance(_real("wall absorption", self.coefficient, f), fluid)

    @classmethod
    def example(cls) -> WallAbsorption:
        return cls(0.02)


@kind("combined")
class CombinedDamping(Damping):
    """Several losses at once: loss factors add, and so do wall admittances."""

    parts: tuple[Damping, ...] = quantity(help="losses to add")

    def loss_factor(self, f: Float, medium: Medium) -> Float:
        return np.asarray(sum((part.loss_factor(f, medium) for part in self.parts), np.zeros(len(f))))

    def hard_wall_admittance(self, f: Float, fluid: Fluid) -> Complex:
        parts = [part.hard_wall_admittance(f, fluid) for part in self.parts]
        return np.asarray(sum(parts, np.zeros(len(f), dtype=np.complex128)))

    @classmethod
    def example(cls) -> CombinedDamping:
        return cls((AirAbsorption(), WallAbsorption(0.02)))


def _real(what: str, value: float | Spectrum, f: Float) -> Float:
    values = as_spectrum(value).at(f)
    wrong = (values.imag != 0) | (values.real < 0)
    if np.any(wrong):
        raise FieldError(
            f"a {what} is real and not negative, got {values[wrong][0]:g} at {f[wrong][0]:g} Hz; correct the table"
        )
    return np.asarray(values.real)


def air_absorption(f: Float, temperature: float = 20.0, pressure: float = 101325.0, humidity: float = 50.0) -> Float:
    """Pure-tone absorption of air [dB/m], (nf,), ISO 9613-1:1993 eqs. (3)-(5) and annex B."""
    kelvin, relative = temperature + ZERO_CELSIUS, pressure / 101325.0
    theta = kelvin / 293.15
    saturation = 10 ** (-6.8346 * (273.16 / kelvin) ** 1.261 + 4.6151)
    h = humidity * saturation / relative
    oxygen = relative * (24 + 4.04e4 * h * (0.02 + h) / (0.391 + h))
    nitrogen = relative * theta**-0.5 * (9 + 280 * h * np.exp(-4.170 * (theta ** (-1 / 3) - 1)))
    classical = 1.84e-11 / relative * np.sqrt(theta)
    relaxing = 0.01275 * np.exp(-2239.1 / kelvin) / (oxygen + f**2 / oxygen)
    relaxing = relaxing + 0.1068 * np.exp(-3352.0 / kelvin) / (nitrogen + f**2 / nitrogen)
    return np.asarray(8.686 * f**2 * (classical + theta**-2.5 * relaxing))
