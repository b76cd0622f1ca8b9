"""Porous materials as equivalent fluids.

    rho_e = Z_c k / w,   K_e = Z_c w / k          per unit of *total* area, e^{+iwt}, Im k < 0

Every law gives the characteristic impedance Z_c [Pa s/m] and the wavenumber k [rad/m] of the material at rest.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.fields import Declared, kind, quantity, record

Complex = npt.NDArray[np.complex128]
Float = npt.NDArray[np.float64]


@record
class Fluid(Declared):
    """An ordinary fluid at rest: what laws and `rho_c` units refer to."""

    density: float = quantity(help="density", unit="kg/m3", positive=True)
    speed: float = quantity(help="speed of sound", unit="m/s", positive=True)
    viscosity: float = quantity(help="dynamic viscosity", unit="Pa.s", positive=True, default=1.84e-5)
    prandtl: float = quantity(help="Prandtl number", positive=True, default=0.71)
    heat_ratio: float = quantity(help="ratio of specific heats", positive=True, default=1.4)
    pressure: float = quantity(
        help="static pressure; heat_ratio * pressure is the adiabatic bulk modulus",
        unit="Pa",
        positive=True,
        default=101325.0,
    )

    @classmethod
    def consistent(cls, density: float, speed: float, **properties: float) -> Fluid:
        """A fluid known by density and speed alone: the pressure follows from rho c^2 = heat_ratio * pressure."""
        fluid = cls(density, speed, **properties)
        return fluid.with_(pressure=density * speed**2 / fluid.heat_ratio)

    @property
    def rho_c(self) -> float:
        """Characteristic impedance [Pa s/m]."""
        return self.density * self.speed


class PorousLaw(Declared):
    """Family of porous laws."""

    def bulk(self, f: Float, fluid: Fluid) -> tuple[Complex, Complex]:
        """Z_c [Pa s/m] and k [rad/m], (nf,) each."""
        raise NotImplementedError

    def effective(self, f: Float, fluid: Fluid) -> tuple[Complex, Complex]:
        """Effective density rho_e [kg/m3] and bulk modulus K_e [Pa], (nf,) each."""
        impedance, k = self.bulk(f, fluid)
        omega = 2 * np.pi * f
        return impedance * k / omega, impedance * omega / k

    def warnings(self, f: Float) -> tuple[str, ...]:
        """What to say where f leaves the range that the law's source covers."""
        return ()


def _power_law(x: Float, c: tuple[float, ...], fluid: Fluid, f: Float) -> tuple[Complex, Complex]:
    """Z_c/(rho c) = 1 + c0 x^-c1 - i c2 x^-c3 and k/(w/c) = 1 + c4 x^-c5 - i c6 x^-c7."""
    impedance = 1 + c[0] * x ** -c[1] - 1j * c[2] * x ** -c[3]
    ratio = 1 + c[4] * x ** -c[5] - 1j * c[6] * x ** -c[7]
    return np.asarray(fluid.rho_c * impedance), np.asarray(2 * np.pi * f / fluid.speed * ratio)


def _range_warning(x: Float, f: Float, low: float, high: float, words: str) -> tuple[str, ...]:
    outside = f[(x < low * (1 - 1e-9)) | (x > high * (1 + 1e-9))]
    if not len(outside):
        return ()
    return (f"{words}; {outside.min():g} .. {outside.max():g} Hz lies outside",)


def _active_warning(x: Float, f: Float, limit: float, words: str) -> tuple[str, ...]:
    """Where Im K_e < 0 a thin layer has Re Z < 0; `limit` is the root of Im K_e(x), which depends on nothing else."""
    active = f[x < limit]
    if not len(active):
        return ()
    return (
        f"{words}, here {active.min():g} .. {active.max():g} Hz: a thin layer has Re Z < 0 and creates sound there; "
        "use johnson_champoux_allard, which is passive at every frequency",
    )


@kind("delany_bazley")
class DelanyBazley(PorousLaw):
    """Fibrous absorbers by one number (Delany & Bazley, Appl. Acoust. 3 (1970) 105; 0.01 < X = rho f/sigma < 1)."""

    flow_resistivity: float = quantity(help="airflow resistivity", unit="Pa.s/m2", positive=True)

    def bulk(self, f: Float, fluid: Fluid) -> tuple[Complex, Complex]:
        x = fluid.density * f / self.flow_resistivity
        return _power_law(x, (0.0571, 0.754, 0.087, 0.732, 0.0978, 0.700, 0.189, 0.595), fluid, f)

    def warnings(self, f: Float) -> tuple[str, ...]:
        x = 1.205 * f / self.flow_resistivity  # the range is a rule of thumb: air at 20 degC will do
        words = "Delany-Bazley holds for 0.01 < rho f/sigma < 1 (Appl. Acoust. 3 (1970) 105)"
        active = "the bulk modulus of Delany-Bazley is active below rho f/sigma = 0.0141"
        return _range_warning(x, f, 0.01, 1.0, words) + _active_warning(x, f, 0.0140955793, active)

    @classmethod
    def example(cls) -> DelanyBazley:
        return cls(20000.0)


@kind("miki")
class Miki(PorousLaw):
    """Delany-Bazley fitted anew, passive in range (Miki, J. Acoust. Soc. Jpn (E) 11 (1990) 19; 0.01 < f/sigma < 1)."""

    flow_resistivity: float = quantity(help="airflow resistivity", unit="Pa.s/m2", positive=True)

    def bulk(self, f: Float, fluid: Fluid) -> tuple[Complex, Complex]:
        y = f / self.flow_resistivity
        return _power_law(y, (0.070, 0.632, 0.107, 0.632, 0.109, 0.618, 0.160, 0.618), fluid, f)

    def warnings(self, f: Float) -> tuple[str, ...]:
        y = f / self.flow_resistivity
        words = "Miki holds for 0.01 < f/sigma < 1 (J. Acoust. Soc. Jpn (E) 11 (1990) 19)"
        active = "the bulk modulus of Miki is active below f/sigma = 0.00081"
        return _range_warning(y, f, 0.01, 1.0, words) + _active_warning(y, f, 0.000805504142, active)

    @classmethod
    def example(cls) -> Miki:
        return cls(20000.0)


@kind("johnson_champoux_allard")
class JohnsonChampouxAllard(PorousLaw):
    """Rigid frame, five parameters, passive at every frequency.

    Johnson et al., J. Fluid Mech. 176 (1987) 379; Champoux & Allard, J. Appl. Phys. 70 (1991) 1975.
    """

    flow_resistivity: float = quantity(help="airflow resistivity", unit="Pa.s/m2", positive=True)
    porosity: float = quantity(help="open porosity", low=0.01, high=1.0)
    tortuosity: float = quantity(help="high-frequency limit of the tortuosity", low=1.0)
    viscous_length: float = quantity(help="viscous characteristic length", unit="m", positive=True)
    thermal_length: float = quantity(help="thermal characteristic length", unit="m", positive=True)

    def effective(self, f: Float, fluid: Fluid) -> tuple[Complex, Complex]:
        w, sigma, phi, alpha = 2 * np.pi * f, self.flow_resistivity, self.porosity, self.tortuosity
        rho, eta, prandtl, gamma = fluid.density, fluid.viscosity, fluid.prandtl, fluid.heat_ratio
        g = np.sqrt(1 + 4j * alpha**2 * eta * rho * w / (sigma * self.viscous_length * phi) ** 2)
        density = alpha * rho / phi * (1 + sigma * phi / (1j * w * rho * alpha) * g)
        h = np.sqrt(1 + 1j * rho * w * prandtl * self.thermal_length**2 / (16 * eta))
        exchange = 1 + 8 * eta / (1j * self.thermal_length**2 * prandtl * w * rho) * h
        return np.asarray(density), np.asarray(gamma * fluid.pressure / phi / (gamma - (gamma - 1) / exchange))

    def bulk(self, f: Float, fluid: Fluid) -> tuple[Complex, Complex]:
        density, modulus = self.effective(f, fluid)
        k = np.asarray(2 * np.pi * f * np.sqrt(density / modulus), dtype=np.complex128)
        return np.asarray(np.sqrt(density * modulus)), k

    @classmethod
    def example(cls) -> JohnsonChampouxAllard:
        return cls(25000.0, 0.98, 1.02, 9e-5, 1.8e-4)
