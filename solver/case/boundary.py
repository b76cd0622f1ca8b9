"""Every boundary kind, declared once.

What a surface does to the fluid is said in a handful of capabilities, and the system of equations is built from these
alone; nothing else in murmesh knows the kinds.

    v_n = drive(f) v_s + Y(f) p        normal velocity of the fluid, out of it

Sign conventions: e^{+iwt}, n out of the fluid, Z = p / (v_n - v_s), Y = 1 / Z.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.fields import Declared, kind, quantity
from murmesh.solver.case.porous import Fluid
from murmesh.solver.case.wall import Given, Layers, PerforatedPlate, WallLaw
from murmesh.solver.errors import FieldError

Complex = npt.NDArray[np.complex128]
Float = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Adjacent:
    """The fluid in front of a surface: its reference values, and rho c [Pa s/m] over frequency with all losses."""

    fluid: Fluid
    impedance: Complex


class Boundary(Declared):
    """Family of boundary kinds. The base class is a hard wall; members override what differs."""

    hard: ClassVar[bool] = False
    """Takes the residual wall absorption that a region states as its damping."""
    moves: ClassVar[bool] = False
    """May carry a surface velocity."""
    fixes_pressure: ClassVar[bool] = False
    """Constrains the pressure unknowns; may carry a surface pressure."""
    takes_wave: ClassVar[bool] = False
    """May carry an incoming plane wave."""
    radiates: ClassVar[bool] = False
    """Carries infinite elements: the fluid goes on outside without end."""

    @property
    def sides(self) -> tuple[Boundary, ...]:
        """One kind for an outer surface; (front, back) for a surface inside the fluid, along which it is opened."""
        return (self,)

    def admittance(self, f: Float, adjacent: Adjacent) -> Complex | None:
        """Y = 1/Z (nf,) [m/(Pa s)], or None where the surface is hard."""
        return None

    def drive(self, f: Float, adjacent: Adjacent) -> Complex:
        """Factor (nf,) between the given wall velocity and the velocity that drives the fluid."""
        return np.ones(len(f), dtype=np.complex128)

    def transfer_admittance(self, f: Float, adjacent: Adjacent) -> Complex | None:
        """(v through a sheet) / (pressure difference across it), or None where nothing passes."""
        return None

    def warnings(self, f: Float, adjacent: Adjacent) -> tuple[str, ...]:
        """What to say about the validity of the laws used, with their published range and source."""
        return ()


@kind("rigid")
class Rigid(Boundary):
    """Hard wall at rest, v_n = 0 (plus the region's residual wall absorption)."""

    hard = True

    @classmethod
    def example(cls) -> Rigid:
        return cls()


@kind("vibrating")
class Vibrating(Boundary):
    """Hard wall that moves, v_n = v_s."""

    hard = True
    moves = True

    @classmethod
    def example(cls) -> Vibrating:
        return cls()


@kind("pressure")
class Pressure(Boundary):
    """Prescribed pressure; zero (pressure release) unless a load gives it."""

    fixes_pressure = True

    @classmethod
    def example(cls) -> Pressure:
        return cls()


@kind("impedance")
class Impedance(Boundary):
    """Locally reacting wall at rest, v_n = p / Z."""

    wall: WallLaw = quantity(help="impedance law of the wall")

    def admittance(self, f: Float, adjacent: Adjacent) -> Complex | None:
        return self.wall.admittance(f, adjacent.fluid)

    def warnings(self, f: Float, adjacent: Adjacent) -> tuple[str, ...]:
        return self.wall.warnings(f)

    @classmethod
    def example(cls) -> Impedance:
        return cls(Given.example())


@kind("vibrating_treated")
class VibratingTreated(Boundary):
    """Wall that moves and carries a treatment, in one of three forms (sign conventions; Biot, J. Appl. Phys. 33 (1962) 1482).

    face:    v_n = v_s + p/Z                                            a locally reacting face that moves itself
    bonded:  v_n = v_b [1 + (rho_0/rho_e)(1/cos(k_m d) - 1)] + p/Z_s    rigid frame bonded to the wall and moving with it
    at_rest: v_n = v_b / cos(k_m d) + p/Z_s                             frame at rest in front of the wall, or limp
    auto:    bonded for a stack of layers, face for every other law.
    """

    moves = True

    wall: WallLaw = quantity(help="impedance law of the treatment on a rigid backing")
    frame: str = quantity(
        help="how the treatment moves with the wall", choices=("auto", "face", "bonded", "at_rest"), default="auto"
    )

    @property
    def form(self) -> str:
        """The frame form, with `auto` resolved."""
        if self.frame != "auto":
            return self.frame
        return "bonded" if isinstance(self.wall, Layers) else "face"

    def admittance(self, f: Float, adjacent: Adjacent) -> Complex | None:
        return self.wall.admittance(f, adjacent.fluid)

    def drive(self, f: Float, adjacent: Adjacent) -> Complex:
        return self.wall.moving_factor(f, adjacent.fluid, self.form)

    def warnings(self, f: Float, adjacent: Adjacent) -> tuple[str, ...]:
        return self.wall.warnings(f)

    @classmethod
    def example(cls) -> VibratingTreated:
        return cls(Layers.example(), "bonded")


@kind("characteristic")
class Characteristic(Boundary):
    """Z = rho c of the fluid in front: absorbs a plane wave at normal incidence completely, others in part."""

    def admittance(self, f: Float, adjacent: Adjacent) -> Complex | None:
        return 1.0 / adjacent.impedance

    @classmethod
    def example(cls) -> Characteristic:
        return cls()


@kind("port")
class Port(Characteristic):
    """End of a duct: v_n = (p - 2 p_in)/(rho c) lets a plane wave in and none back; right below the duct's first cut-on."""

    takes_wave = True

    @classmethod
    def example(cls) -> Port:
        return cls()


@kind("radiating")
class Radiating(Boundary):
    """Outer surface beyond which the fluid goes on without end (infinite elements); star-shaped about its centre.

    A dome ends on a ground plane through the centre, rigid or pressure-release. Surfaces of this kind that touch are one.
    """

    radiates = True

    centre: tuple[float, float, float] | None = quantity(
        help="a point from which all of the surface is seen (default: the middle of its bounding box)", unit="m", default=None
    )
    radial_functions: int = quantity(
        help="radial functions; 0: 8 where the surface is small against the wave length (k a <= 10), 10 above",
        low=0,
        high=20,
        default=0,
    )
    ground: str = quantity(
        help="plane through the centre on which a dome ends", choices=("none", "rigid", "pressure_release"), default="none"
    )
    ground_normal: tuple[float, float, float] = quantity(
        help="the ground plane's normal, to the side of the fluid", default=(0.0, 0.0, 1.0)
    )

    def validate(self) -> None:
        if not any(self.ground_normal):
            raise FieldError("the ground plane's normal is (0, 0, 0); give the direction from the plane to the fluid")

    @classmethod
    def example(cls) -> Radiating:
        return cls((0.0, 0.0, 0.0), 8, "rigid", (0.0, 0.0, 1.0))


@kind("sheet")
class Sheet(Boundary):
    """Thin surface inside the fluid; the mesh is opened along it and its two sides carry kinds of their own.

    A transfer impedance Z_t (both sides then rigid or vibrating) lets air through: v = (p_front - p_back) / Z_t. A
    moving sheet moves as one; "positive = into the air" is the air in front of it.
    """

    moves = True

    front: Boundary = quantity(help="kind of the front side", default=Vibrating())
    back: Boundary = quantity(help="kind of the back side", default=Vibrating())
    transfer: WallLaw | None = quantity(help="transfer impedance law (a perforated plate ...)", default=None)
    front_region: str | None = quantity(help="the front is the side in this region", default=None)
    front_direction: tuple[float, float, float] | None = quantity(
        help="the front is the side that looks in this direction (default: the triangles' own orientation)",
        default=None,
    )

    def validate(self) -> None:
        for side in (self.front, self.back):
            if isinstance(side, Sheet) or side.fixes_pressure or side.takes_wave or side.radiates:
                raise FieldError(f"a sheet's side cannot be of kind '{side.kind_name}'; use rigid, vibrating or impedance")
            if self.transfer is not None and not side.hard:
                raise FieldError(
                    f"a sheet with a transfer impedance has hard sides, not '{side.kind_name}'; drop one of the two"
                )
        if self.front_region is not None and self.front_direction is not None:
            raise FieldError("a sheet's front is said twice; give front_region or front_direction, not both")

    @property
    def sides(self) -> tuple[Boundary, ...]:
        return (self.front, self.back)

    def transfer_admittance(self, f: Float, adjacent: Adjacent) -> Complex | None:
        return None if self.transfer is None else self.transfer.admittance(f, adjacent.fluid)

    def warnings(self, f: Float, adjacent: Adjacent) -> tuple[str, ...]:
        own = () if self.transfer is None else self.transfer.warnings(f)
        return own + self.front.warnings(f, adjacent) + self.back.warnings(f, adjacent)

    @classmethod
    def example(cls) -> Sheet:
        return cls(Rigid(), Rigid(), PerforatedPlate.example(), None, (0.0, 0.0, 1.0))
