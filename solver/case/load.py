"""What drives the air, and how several loads act together.

A load case is one operating state. Its loads give complex pressures p_i at a receiver; together they give the mean
square (1/2) sum_ij G_ij p_i conj(p_j), where the matrix G says how they are related: all ones for coherent loads,
the identity for incoherent ones, or a cross-spectral matrix.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.fields import Declared, kind, quantity, record
from murmesh.solver.case.motion import Motion, Uniform
from murmesh.solver.case.spectrum import Constant, Spectrum, as_spectrum
from murmesh.solver.errors import FieldError, RangeError

Complex = npt.NDArray[np.complex128]
Float = npt.NDArray[np.float64]


class Load(Declared):
    """Family of loads. `acts_on` names the surface (or is empty for a source in the volume)."""

    @property
    def name(self) -> str:
        """The name under which the load's contribution is reported."""
        raise NotImplementedError

    @property
    def acts_on(self) -> str:
        return ""


class SurfaceLoad(Load):
    """What loads on a surface share: they are called after it."""

    surface: str

    @property
    def name(self) -> str:
        return self.surface

    @property
    def acts_on(self) -> str:
        return self.surface


@kind("surface_velocity")
class SurfaceVelocity(SurfaceLoad):
    """A surface of a kind that moves (vibrating, vibrating_treated, sheet) moves as measured or computed."""

    surface: str = quantity(help="name of the surface")
    motion: Motion = quantity(help="how it moves")
    cut: float | Spectrum = quantity(help="by how much a treatment lowers the velocity", unit="dB", default=0.0)

    def cut_factor(self, f: Float) -> Float:
        """10^(-cut/20), (nf,)."""
        return np.asarray(10 ** (-as_spectrum(self.cut).at(f).real / 20))

    @classmethod
    def example(cls) -> SurfaceVelocity:
        return cls("panel", Uniform.example())


@kind("surface_pressure")
class SurfacePressure(SurfaceLoad):
    """The pressure on a surface of kind `pressure` (uniform over the surface)."""

    surface: str = quantity(help="name of the surface")
    pressure: complex | Spectrum = quantity(help="complex peak pressure", unit="Pa")

    @classmethod
    def example(cls) -> SurfacePressure:
        return cls("panel", Constant(1.0 + 0j))


@kind("incoming_wave")
class IncomingWave(SurfaceLoad):
    """A plane wave that enters through a surface of kind `port`; its pressure is that at the port."""

    surface: str = quantity(help="name of the port surface")
    pressure: complex | Spectrum = quantity(help="complex peak pressure of the incoming wave at the port", unit="Pa")

    @classmethod
    def example(cls) -> IncomingWave:
        return cls("panel", Constant(1.0 + 0j))


@kind("monopole")
class Monopole(Load):
    """Point source, p = i w rho Q G: a small source of volume velocity Q (common practice: Q > 0 pushes air out)."""

    label: str = quantity(help="name of the source")
    position: tuple[float, float, float] = quantity(help="x, y, z", unit="m")
    volume_velocity: complex | Spectrum = quantity(help="complex peak volume velocity", unit="m3/s")

    @property
    def name(self) -> str:
        return self.label

    @classmethod
    def example(cls) -> Monopole:
        return cls("source", (0.3, 0.4, 0.25), 1e-3 + 0j)


class IncidentField(Load):
    """A field that comes from outside and meets a surface of kind `radiating`: what the model adds to it goes out again."""

    label: str

    @property
    def name(self) -> str:
        return self.label

    def amplitude(self, f: Float, density: Complex) -> Complex:
        """What multiplies `shape`, (nf,) [Pa], for a fluid of density (nf,)."""
        raise NotImplementedError

    def shape(self, points: Float, k: complex) -> tuple[Complex, Complex]:
        """p / amplitude (q,) and its gradient (q, 3) [1/m] at points (q, 3), in a fluid without end."""
        raise NotImplementedError

    def delay(self, centre: Float) -> float:
        """Path [m] at `centre`: the shape's phase there is e^{-ik delay}."""
        raise NotImplementedError


@kind("plane_wave")
class PlaneWave(IncidentField):
    """A plane wave from outside, p = P e^{-ik d.(x - x_0)}; a ground plane reflects it."""

    label: str = quantity(help="name of the wave")
    direction: tuple[float, float, float] = quantity(help="where the wave goes")
    pressure: complex | Spectrum = quantity(help="complex peak pressure of the wave by itself", unit="Pa")
    origin: tuple[float, float, float] = quantity(help="point where it has this pressure", unit="m", default=(0.0, 0.0, 0.0))

    def validate(self) -> None:
        if not any(self.direction):
            raise FieldError("a plane wave's direction is (0, 0, 0); give the direction in which it travels")

    def amplitude(self, f: Float, density: Complex) -> Complex:
        return as_spectrum(self.pressure).at(f)

    def shape(self, points: Float, k: complex) -> tuple[Complex, Complex]:
        wave = np.exp(-1j * k * ((points - np.asarray(self.origin)) @ self._unit))
        return wave, -1j * k * wave[:, None] * self._unit

    def delay(self, centre: Float) -> float:
        return float((centre - np.asarray(self.origin)) @ self._unit)

    @property
    def _unit(self) -> Float:
        return np.asarray(np.asarray(self.direction) / np.linalg.norm(self.direction))

    @classmethod
    def example(cls) -> PlaneWave:
        return cls("wave", (0.0, 0.0, 1.0), 1.0 + 0j)


@kind("outside_monopole")
class OutsideMonopole(IncidentField):
    """Point source beyond a surface of kind `radiating`, p = i w rho Q e^{-ikr} / (4 pi r); a ground plane reflects it."""

    label: str = quantity(help="name of the source")
    position: tuple[float, float, float] = quantity(help="x, y, z", unit="m")
    volume_velocity: complex | Spectrum = quantity(help="complex peak volume velocity", unit="m3/s")

    def amplitude(self, f: Float, density: Complex) -> Complex:
        return np.asarray(2j * np.pi * f * density * as_spectrum(self.volume_velocity).at(f))

    def shape(self, points: Float, k: complex) -> tuple[Complex, Complex]:
        away = points - np.asarray(self.position)
        r = np.linalg.norm(away, axis=1)
        wave = np.exp(-1j * k * r) / (4 * np.pi * r)
        return wave, (-(1j * k + 1.0 / r) * wave / r)[:, None] * away

    def delay(self, centre: Float) -> float:
        return float(np.linalg.norm(centre - np.asarray(self.position)))

    @classmethod
    def example(cls) -> OutsideMonopole:
        return cls("distant_source", (2.0, 0.0, 1.0), 1e-3 + 0j)


class Combination(Declared):
    """Family of rules by which the loads of a load case act together."""

    needs_phase = True

    def matrix(self, f: Float, loads: int) -> Complex:
        """G (nf, loads, loads), Hermitian and positive semidefinite."""
        raise NotImplementedError

    def factors(self, f: Float, loads: int) -> Complex:
        """Columns g (nf, loads, r) with G = sum_r g_r g_r^H: r solutions carry all the field's mean squares."""
        values, vectors = np.linalg.eigh(self.matrix(f, loads))
        return np.asarray(vectors * np.sqrt(np.maximum(values, 0.0))[:, None, :], dtype=np.complex128)


@kind("coherent")
class Coherent(Combination):
    """Phases are known: pressures add as complex numbers."""

    def matrix(self, f: Float, loads: int) -> Complex:
        return np.ones((len(f), loads, loads), dtype=np.complex128)

    def factors(self, f: Float, loads: int) -> Complex:
        return np.ones((len(f), loads, 1), dtype=np.complex128)

    @classmethod
    def example(cls) -> Coherent:
        return cls()


@kind("incoherent")
class Incoherent(Combination):
    """Loads are unrelated: mean squares add."""

    needs_phase = False

    def matrix(self, f: Float, loads: int) -> Complex:
        return np.broadcast_to(np.eye(loads, dtype=np.complex128), (len(f), loads, loads)).copy()

    def factors(self, f: Float, loads: int) -> Complex:
        return self.matrix(f, loads)

    @classmethod
    def example(cls) -> Incoherent:
        return cls()


@kind("cross_spectrum")
class CrossSpectrum(Combination):
    """A Hermitian matrix S over frequency scales and relates the loads (give each load the amplitude 1)."""

    needs_phase = False

    frequencies: npt.NDArray[np.float64] = quantity(help="frequencies, increasing, (nf,)", unit="Hz", positive=True)
    values: npt.NDArray[np.complex128] = quantity(help="Hermitian matrices in the order of the loads, (nf, n, n)")

    def validate(self) -> None:
        s = self.values
        if s.ndim != 3 or s.shape[0] != len(self.frequencies) or s.shape[1] != s.shape[2]:
            raise FieldError(f"cross-spectral matrix has shape {s.shape}, expected (frequencies, loads, loads)")
        if np.any(np.diff(self.frequencies) <= 0):
            raise FieldError("cross-spectral frequencies must increase strictly; sort them and remove duplicates")
        scale = max(float(np.abs(s).max()), 1e-300)
        if np.abs(s - np.conj(np.swapaxes(s, 1, 2))).max() > 1e-9 * scale:
            raise FieldError("cross-spectral matrix is not Hermitian: S_ij must equal conj(S_ji); check rows and columns")
        if np.linalg.eigvalsh(s).min() < -1e-9 * scale * s.shape[1]:
            raise FieldError("cross-spectral matrix has a negative eigenvalue, so some level would be negative; check it")

    def matrix(self, f: Float, loads: int) -> Complex:
        if self.values.shape[1] != loads:
            raise FieldError(f"cross-spectral matrix is for {self.values.shape[1]} loads, the load case has {loads}")
        low, high = self.frequencies[0], self.frequencies[-1]
        if np.any(f < low * (1 - 1e-9)) or np.any(f > high * (1 + 1e-9)):
            raise RangeError(
                f"the cross-spectral matrix holds {low:g} .. {high:g} Hz, but {f.min():g} .. {f.max():g} Hz is asked; "
                "narrow the sweep or give the missing lines"
            )
        flat = self.values.reshape(len(self.frequencies), -1)
        columns = [np.interp(f, self.frequencies, flat[:, j]) for j in range(flat.shape[1])]
        return np.stack(columns, axis=1).reshape(len(f), loads, loads)

    @classmethod
    def example(cls) -> CrossSpectrum:
        matrix = np.array([[2.0, 0.5 + 0.5j], [0.5 - 0.5j, 1.0]])
        return cls(np.array([10.0, 1000.0]), np.stack([matrix, matrix]))


@record
class LoadCase(Declared):
    """One operating state: loads, how they combine, and whether their amplitudes are tones or densities.

    `tones`: every sweep line is a tone of its own; band levels are sums over lines.
    `density`: amplitudes hold in a band of `bandwidth` [Hz]; band levels are integrals over frequency.
    """

    name: str = quantity(help="name of the operating state")
    loads: tuple[Load, ...] = quantity(help="what drives the air")
    spectrum: str = quantity(help="line spectrum or density", choices=("tones", "density"), default="density")
    bandwidth: float = quantity(help="bandwidth the amplitudes of a density hold in", unit="Hz", positive=True, default=1.0)
    combination: Combination = quantity(help="how the loads act together", default=Coherent())

    def validate(self) -> None:
        names = [load.name for load in self.loads]
        if not names:
            raise FieldError(f"load case '{self.name}' has no load; add a surface velocity, a source or an incoming wave")
        for name in names:
            if names.count(name) > 1:
                raise FieldError(f"load case '{self.name}': '{name}' is loaded twice; merge the two loads into one")
        for load in self.loads:
            self._check_load(load)

    def _check_load(self, load: Load) -> None:
        if not isinstance(load, SurfaceVelocity):
            return
        if self.combination.needs_phase and not load.motion.has_phase:
            raise FieldError(
                f"load case '{self.name}': '{load.name}' is an autospectrum without phase, which cannot be combined "
                "coherently; use the combination 'incoherent' or 'cross_spectrum'"
            )
        if getattr(load.motion, "form", "") == "psd" and (self.spectrum != "density" or self.bandwidth != 1.0):
            raise FieldError(
                f"load case '{self.name}': '{load.name}' is a density per hertz; set spectrum = 'density', bandwidth = 1"
            )
