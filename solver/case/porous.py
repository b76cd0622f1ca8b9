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
    pressure: float = quantity(help="static pressure", unit="Pa", positive=True, default=101325.0)

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
    return fluid.rho_c * impedance, 2 * np.pi * f / fluid.speed * ratio


def _range_warning(x: Float, f: Float, low: float, high: float, words: str) -> tuple[str, ...]:
    outside = f[(x < low * (1 - 1e-9)) | (x > high * (1 + 1e-9))]
    if not len(outside):
        return ()
    return (f"{words}; {outside.min():g} .. {outside.max():g} Hz lies outside",)


@kind("delany_bazley")
class DelanyBazley(PorousLaw):
    """Fibrous absorbers by one number, X = rho f / sigma (Delany & Bazley, Appl. Acoust. 3 (1970) 105; 0.01 < X < 1)."""

    flow_resistivity: float = quantity(help="airflow resistivity", unit="Pa.s/m2", positive=True)

    def bulk(self, f: Float, fluid: Fluid) -> tuple[Complex, Complex]:
        x = fluid.density * f / self.flow_resistivity
        return _power_law(x, (0.0571, 0.754, 0.087, 0.732, 0.0978, 0.700, 0.189, 0.595), fluid, f)

    def warnings(self, f: Float) -> tuple[str, ...]:
        words = "Delany-Bazley holds for 0.01 < rho f/sigma < 1 (Appl. Acoust. 3 (1970) 105)"
        return _range_warning(1.205 * f / self.flow_resistivity, f, 0.01, 1.0, words)

    @classmethod
    def example(cls) -> DelanyBazley:
        return cls(20000.0)


@kind("miki")
class Miki(PorousLaw):
    """Delany-Bazley made positive real, Y = f / sigma (Miki, J. Acoust. Soc. Jpn (E) 11 (1990) 19; 0.01 < Y < 1)."""

    flow_resistivity: float = quantity(help="airflow resistivity", unit="Pa.s/m2", positive=True)

    def bulk(self, f: Float, fluid: Fluid) -> tuple[Complex, Complex]:
        y = f / self.flow_resistivity
        return _power_law(y, (0.070, 0.632, 0.107, 0.632, 0.109, 0.618, 0.160, 0.618), fluid, f)

    def warnings(self, f: Float) -> tuple[str, ...]:
        words = "Miki holds for 0.01 < f/sigma < 1 and stays passive below (J. Acoust. Soc. Jpn (E) 11 (1990) 19)"
        return _range_warning(f / self.flow_resistivity, f, 0.01, 1.0, words)

    @classmethod
    def example(cls) -> Miki:
        return cls(20000.0)


@kind("johnson_champoux_allard")
class JohnsonChampouxAllard(PorousLaw):
    """Rigid frame, five parameters (Johnson et al., JFM 176 (1987) 379; Champoux & Allard, J. Appl. Phys. 70 (1991) 1975)."""

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
        return density, gamma * fluid.pressure / phi / (gamma - (gamma - 1) / exchange)

    def bulk(self, f: Float, fluid: Fluid) -> tuple[Complex, Complex]:
        density, modulus = self.effective(f, fluid)
        return np.sqrt(density * modulus), 2 * np.pi * f * np.sqrt(density / modulus)

    @classmethod
    def example(cls) -> JohnsonChampouxAllard:
        return cls(25000.0, 0.98, 1.02, 9e-5, 1.8e-4)
