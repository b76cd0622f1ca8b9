"""Impedance laws of walls, declared once.

    Y = 1/Z = (velocity into the wall) / p          [m/(Pa s)], e^{+iwt}: mass-like Im Z > 0, spring-like Im Z < 0

A stack of layers is a chain of transfer matrices. Layer j carries the state [p; v - a_j v_b] from its back to its
front, where v_b is the velocity of the backing and a_j says how much of it the layer's frame imposes on the flow: for a
porous layer whose rigid frame moves with the backing a = 1 - rho_0/rho_e (Biot, J. Appl. Phys. 33 (1962) 1482).
At every interface v = u v_b + Y p. From the backing (Y = 0, u = 1) to the front, with det T = 1,

    t = 1/(T11 + T12 Y),   Y <- (T21 + T22 Y) t,   u <- a + t (u - a)

which never subtracts large numbers, however thick the layers.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.special import jv

from murmesh.solver.case.fields import Declared, kind, quantity
from murmesh.solver.case.porous import Fluid, Miki, PorousLaw
from murmesh.solver.case.spectrum import Constant, Spectrum, as_spectrum
from murmesh.solver.errors import FieldError

Complex = npt.NDArray[np.complex128]
Float = npt.NDArray[np.float64]
FRAMES = ("face", "bonded", "at_rest")


class WallLaw(Declared):
    """Family of impedance laws."""

    def impedance(self, f: Float, fluid: Fluid) -> Complex:
        """Z (nf,) [Pa s/m]."""
        raise NotImplementedError

    def admittance(self, f: Float, fluid: Fluid) -> Complex:
        """Y = 1/Z (nf,) [m/(Pa s)]; FieldError where Z = 0."""
        return _from_impedance(self.impedance(f, fluid), f)

    def moving_factor(self, f: Float, fluid: Fluid, frame: str) -> Complex:
        """v_n / v_b (nf,) at p = 0 when the wall behind moves, for the frame forms face, bonded and at_rest."""
        if frame != "face":
            raise FieldError(
                f"the frame form '{frame}' needs a stack of layers, but the wall law is '{self.kind_name}'; use "
                "'face', or describe the treatment as layers"
            )
        return np.ones(len(f), dtype=np.complex128)

    def warnings(self, f: Float) -> tuple[str, ...]:
        """What to say where f leaves the range that the law's source covers."""
        return ()


def _from_impedance(impedance: Complex, f: Float) -> Complex:
    soft = f[impedance == 0]
    if len(soft):
        raise FieldError(
            f"an impedance of zero (at {soft[0]:g} Hz) is a pressure-release surface; use the boundary kind "
            "'pressure', or give the law a resistance"
        )
    return np.asarray(1.0 / impedance)


def _from_admittance(admittance: Complex) -> Complex:
    """1/Y, infinite where the wall is hard."""
    hard = admittance == 0
    return np.where(hard, np.inf, 1.0 / np.where(hard, 1.0, admittance))


def check_passive(law: WallLaw, f: Float, fluid: Fluid) -> None:
    """FieldError naming the first frequency where Re Z < 0, that is where the wall would create sound."""
    admittance = law.admittance(f, fluid)
    active = np.flatnonzero(admittance.real < -1e-12 * np.abs(admittance))
    if len(active):
        at = int(active[0])
        raise FieldError(
            f"wall law '{law.kind_name}' has Re Z < 0 at {f[at]:g} Hz (Z = {1 / admittance[at]:.4g} Pa.s/m), so the "
            "wall would create sound; check the sign of the real part, the time sign and the range of the law"
        )


@kind("given")
class Given(WallLaw):
    """A number or a table, measured or computed; its unit, form and time sign are said."""

    value: complex | Spectrum = quantity(help="impedance or admittance")
    unit: str = quantity(help="rho_c: relative to rho c of the fluid in front", choices=("rho_c", "Pa.s/m"), default="rho_c")
    form: str = quantity(
        help="impedance Z, or admittance 1/Z (in 1/unit)", choices=("impedance", "admittance"), default="impedance"
    )
    time_sign: str = quantity(help="sign of e^(+-iwt) the data hold for; '-' is conjugated", choices=("+", "-"), default="+")

    def admittance(self, f: Float, fluid: Fluid) -> Complex:
        values = as_spectrum(self.value).at(f)
        if self.time_sign == "-":
            values = values.conj()
        scale = fluid.rho_c if self.unit == "rho_c" else 1.0
        if self.form == "admittance":
            return np.asarray(values / scale)
        return _from_impedance(values * scale, f)

    def impedance(self, f: Float, fluid: Fluid) -> Complex:
        return _from_admittance(self.admittance(f, fluid))

    @classmethod
    def example(cls) -> Given:
        return cls(Constant(3.0 - 1.5j), "rho_c")


@kind("absorption")
class Absorption(WallLaw):
    """Real Z >= rho c with normal-incidence absorption alpha = 1 - |R|^2: a rough guess, for want of phase data."""

    coefficient: float | Spectrum = quantity(help="normal-incidence absorption coefficient, 0 .. 1", low=0.0, high=1.0)

    def admittance(self, f: Float, fluid: Fluid) -> Complex:
        return absorption_admittance(as_spectrum(self.coefficient).at(f).real, fluid)

    def impedance(self, f: Float, fluid: Fluid) -> Complex:
        return _from_admittance(self.admittance(f, fluid))

    @classmethod
    def example(cls) -> Absorption:
        return cls(0.3)


def absorption_admittance(alpha: Float, fluid: Fluid) -> Complex:
    """Y = (1 - s)/(1 + s) / (rho c), s = sqrt(1 - alpha): the smaller real admittance that absorbs alpha."""
    if np.any(alpha < 0) or np.any(alpha > 1):
        raise FieldError(f"an absorption coefficient lies between 0 and 1, got {alpha.min():g} .. {alpha.max():g}")
    s = np.sqrt(1 - alpha)
    return np.asarray((1 - s) / (1 + s) / fluid.rho_c, dtype=np.complex128)


@kind("resonator")
class Resonator(WallLaw):
    """Z = R + i w M + K/(i w), per area: Helmholtz resonators, panels on springs."""

    resistance: float = quantity(help="R, per area", unit="Pa.s/m", low=0.0)
    mass: float = quantity(help="M, per area", unit="kg/m2", low=0.0)
    stiffness: float = quantity(help="K, per area", unit="N/m3", low=0.0)

    def impedance(self, f: Float, fluid: Fluid) -> Complex:
        w = 2 * np.pi * f
        return np.asarray(self.resistance + 1j * w * self.mass + self.stiffness / (1j * w))

    @classmethod
    def example(cls) -> Resonator:
        return cls(400.0, 1.2, 3e5)


@kind("mass_spring_damper")
class MassSpringDamper(WallLaw):
    """Z = i w m (1 - (w0/w)^2 (1 + i eta)): a wall that yields as a mass on a lossy spring."""

    mass: float = quantity(help="mass per area", unit="kg/m2", positive=True)
    resonance: float = quantity(help="resonance frequency", unit="Hz", positive=True)
    loss_factor: float = quantity(help="loss factor of the spring", low=0.0, default=0.05)

    def impedance(self, f: Float, fluid: Fluid) -> Complex:
        ratio = (self.resonance / f) ** 2 * (1 + 1j * self.loss_factor)
        return np.asarray(2j * np.pi * f * self.mass * (1 - ratio))

    @classmethod
    def example(cls) -> MassSpringDamper:
        return cls(8.0, 60.0, 0.08)


@kind("perforated_plate")
class PerforatedPlate(WallLaw):
    """zeta = [0.006 + i k (t + 0.75 d)] / phi, no flow (Sullivan & Crocker, JASA 64 (1978) 207)."""

    hole_diameter: float = quantity(help="hole diameter d", unit="m", positive=True)
    thickness: float = quantity(help="plate thickness t", unit="m", positive=True)
    open_area_ratio: float = quantity(help="open area phi", low=1e-4, high=1.0)

    def impedance(self, f: Float, fluid: Fluid) -> Complex:
        k = 2 * np.pi * f / fluid.speed
        zeta = (0.006 + 1j * k * (self.thickness + 0.75 * self.hole_diameter)) / self.open_area_ratio
        return np.asarray(fluid.rho_c * zeta)

    @classmethod
    def example(cls) -> PerforatedPlate:
        return cls(2.49e-3, 0.81e-3, 0.037)


# ---------------------------------------------------------------------------------------------------------------------
# layers


class Layer(Declared):
    """Family of layers in a stack."""

    def transfer(self, f: Float, fluid: Fluid) -> Complex:
        """T (nf, 2, 2): [p; v] in front = T [p; v] behind, v towards the wall."""
        raise NotImplementedError

    def frame_share(self, f: Float, fluid: Fluid) -> Complex:
        """a (nf,): how much of the backing's velocity a frame bonded to it imposes on the flow."""
        return np.zeros(len(f), dtype=np.complex128)

    def warnings(self, f: Float) -> tuple[str, ...]:
        return ()


def _fluid_layer(impedance: Complex, kd: Complex) -> Complex:
    rows = [[np.cos(kd), 1j * impedance * np.sin(kd)], [1j * np.sin(kd) / impedance, np.cos(kd)]]
    return np.moveaxis(np.array(rows, dtype=np.complex128), 2, 0)


def _series(impedance: Complex) -> Complex:
    one, zero = np.ones_like(impedance), np.zeros_like(impedance)
    return np.moveaxis(np.array([[one, impedance], [zero, one]], dtype=np.complex128), 2, 0)


@kind("porous")
class PorousLayer(Layer):
    """A porous layer of one of the porous laws."""

    law: PorousLaw = quantity(help="porous law")
    thickness: float = quantity(help="thickness", unit="m", positive=True)

    def transfer(self, f: Float, fluid: Fluid) -> Complex:
        impedance, k = self.law.bulk(f, fluid)
        return _fluid_layer(impedance, k * self.thickness)

    def frame_share(self, f: Float, fluid: Fluid) -> Complex:
        return np.asarray(1 - fluid.density / self.law.effective(f, fluid)[0])

    def warnings(self, f: Float) -> tuple[str, ...]:
        return self.law.warnings(f)

    @classmethod
    def example(cls) -> PorousLayer:
        return cls(Miki.example(), 0.05)


@kind("air_gap")
class AirGap(Layer):
    """A gap filled with the fluid in front."""

    thickness: float = quantity(help="thickness", unit="m", positive=True)

    def transfer(self, f: Float, fluid: Fluid) -> Complex:
        kd = 2 * np.pi * f / fluid.speed * self.thickness
        return _fluid_layer(np.full(len(f), fluid.rho_c, dtype=np.complex128), kd.astype(np.complex128))

    @classmethod
    def example(cls) -> AirGap:
        return cls(0.03)


@kind("perforated_facing")
class PerforatedFacing(Layer):
    """Perforated or micro-perforated plate: short tubes with end corrections (Maa, JASA 104 (1998) 2861, eqs. 2 and 5).

    Z = {i w rho t [1 - 2 J1(s)/(s J0(s))]^-1 + sqrt(2 w rho eta)/2 + 0.85 i w rho d}/phi, s = (d/2) sqrt(-i w rho/eta)
    """

    hole_diameter: float = quantity(help="hole diameter d", unit="m", positive=True)
    thickness: float = quantity(help="plate thickness t", unit="m", positive=True)
    open_area_ratio: float = quantity(help="open area phi", low=1e-4, high=1.0)

    def transfer(self, f: Float, fluid: Fluid) -> Complex:
        w, rho, eta = 2 * np.pi * f, fluid.density, fluid.viscosity
        s = self.hole_diameter / 2 * np.sqrt(-1j * w * rho / eta)
        tube = 1j * w * rho * self.thickness / (1 - 2 * jv(1, s) / (s * jv(0, s)))
        ends = np.sqrt(2 * w * rho * eta) / 2 + 0.85j * w * rho * self.hole_diameter
        return _series(np.asarray((tube + ends) / self.open_area_ratio, dtype=np.complex128))

    def frame_share(self, f: Float, fluid: Fluid) -> Complex:
        return np.ones(len(f), dtype=np.complex128)

    @classmethod
    def example(cls) -> PerforatedFacing:
        return cls(1e-3, 1e-3, 0.05)


@kind("screen")
class Screen(Layer):
    """A thin flow resistance: cloth, felt, paint."""

    flow_resistance: float = quantity(help="airflow resistance", unit="Pa.s/m", low=0.0)

    def transfer(self, f: Float, fluid: Fluid) -> Complex:
        return _series(np.full(len(f), self.flow_resistance, dtype=np.complex128))

    def frame_share(self, f: Float, fluid: Fluid) -> Complex:
        return np.ones(len(f), dtype=np.complex128)

    @classmethod
    def example(cls) -> Screen:
        return cls(200.0)


@kind("limp_mass")
class LimpMass(Layer):
    """A heavy limp foil: p in front - p behind = i w m v."""

    mass_per_area: float = quantity(help="mass per area", unit="kg/m2", positive=True)

    def transfer(self, f: Float, fluid: Fluid) -> Complex:
        return _series(np.asarray(2j * np.pi * f * self.mass_per_area, dtype=np.complex128))

    @classmethod
    def example(cls) -> LimpMass:
        return cls(2.0)


@kind("layers")
class Layers(WallLaw):
    """Layers on a rigid backing, the first one facing the fluid; for one porous layer Z_s = -i Z_c cot(k d)."""

    layers: tuple[Layer, ...] = quantity(help="layers, front to back")

    def validate(self) -> None:
        if not self.layers:
            raise FieldError("a stack needs at least one layer; give layers = [...], front to back")

    def _carry(self, f: Float, fluid: Fluid, bonded: bool) -> tuple[Complex, Complex]:
        """Y and u (nf,) in front: the flow there is v = u v_b + Y p."""
        admittance, drive = np.zeros(len(f), dtype=np.complex128), np.ones(len(f), dtype=np.complex128)
        for layer in reversed(self.layers):
            matrix = layer.transfer(f, fluid)
            share = layer.frame_share(f, fluid) if bonded else 0.0
            passed = 1 / (matrix[:, 0, 0] + matrix[:, 0, 1] * admittance)
            admittance = (matrix[:, 1, 0] + matrix[:, 1, 1] * admittance) * passed
            drive = share + passed * (drive - share)
        return admittance, drive

    def admittance(self, f: Float, fluid: Fluid) -> Complex:
        return self._carry(f, fluid, False)[0]

    def impedance(self, f: Float, fluid: Fluid) -> Complex:
        return _from_admittance(self.admittance(f, fluid))

    def moving_factor(self, f: Float, fluid: Fluid, frame: str) -> Complex:
        if frame not in FRAMES:
            raise FieldError(f"frame '{frame}' is not known; use one of {', '.join(FRAMES)}")
        if frame == "face":
            return np.ones(len(f), dtype=np.complex128)
        return self._carry(f, fluid, frame == "bonded")[1]

    def warnings(self, f: Float) -> tuple[str, ...]:
        return tuple(dict.fromkeys(text for layer in self.layers for text in layer.warnings(f)))

    @classmethod
    def example(cls) -> Layers:
        return cls((PerforatedFacing.example(), PorousLayer.example(), AirGap.example()))


# ---------------------------------------------------------------------------------------------------------------------
# absorption coefficients


def normal_absorption(zeta: Complex) -> Float:
    """alpha = 1 - |(zeta - 1)/(zeta + 1)|^2 at normal incidence, zeta = Z/(rho c)."""
    return np.asarray(1 - np.abs((zeta - 1) / (zeta + 1)) ** 2)


def statistical_absorption(zeta: Complex) -> Float:
    """Diffuse-field absorption of a locally reacting wall, Paris's integral in closed form (Kuttruff, Room Acoustics).

    alpha = (8 r/|z|^2) { 1 - (r/|z|^2) ln[(1+r)^2 + x^2] + ((r^2-x^2)/(x |z|^2)) arctan(x/(1+r)) },  z = r + i x
    """
    r, x = np.real(zeta), np.imag(zeta)
    square = r**2 + x**2
    safe = np.where(np.abs(x) < 1e-9, 1.0, x)
    angle = np.where(np.abs(x) < 1e-9, 1 / (1 + r), np.arctan(safe / (1 + r)) / safe)
    return np.asarray(8 * r / square * (1 - r / square * np.log((1 + r) ** 2 + x**2) + (r**2 - x**2) / square * angle))
