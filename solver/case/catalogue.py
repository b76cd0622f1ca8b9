"""Treatments: what can be applied to a panel, what it weighs and costs; and the limits of a choice among them."""

from __future__ import annotations

from murmesh.solver.case.fields import Declared, quantity, record
from murmesh.solver.case.spectrum import Spectrum
from murmesh.solver.case.wall import Layers, WallLaw
from murmesh.solver.errors import FieldError


@record
class Treatment(Declared):
    """A treatment changes a panel's impedance, its velocity, or both; what the panel carried before, wall or cut, goes."""

    name: str = quantity(help="name of the treatment")
    mass_per_area: float = quantity(help="mass per area", unit="kg/m2", low=0.0)
    cost_per_area: float = quantity(help="cost per area", unit="EUR/m2", low=0.0)
    thickness: float = quantity(help="thickness", unit="m", low=0.0, default=0.0)
    wall: WallLaw | None = quantity(help="impedance law it gives the panel", default=None)
    frame: str = quantity(
        help="how it moves with a moving panel", choices=("auto", "face", "bonded", "at_rest"), default="auto"
    )
    velocity_cut: float | Spectrum = quantity(help="how much it lowers the panel's velocity", unit="dB", default=0.0)
    panels: tuple[str, ...] = quantity(help="panels where it may go; names or globs", default=("*",))

    def validate(self) -> None:
        if self.wall is None and not isinstance(self.velocity_cut, Spectrum) and self.velocity_cut == 0.0:
            raise FieldError(f"treatment '{self.name}' changes nothing; give it a wall law, a velocity_cut, or both")
        if self.frame in ("bonded", "at_rest") and self.wall is not None and not isinstance(self.wall, Layers):
            raise FieldError(
                f"treatment '{self.name}': the frame '{self.frame}' needs a stack of layers, but its wall is of kind "
                f"'{self.wall.kind_name}'; use 'face', or describe it as layers"
            )

    @classmethod
    def example(cls) -> Treatment:
        return cls("foam", 1.5, 12.0, 0.05, Layers.example(), "auto", 3.0, ("roof", "door_*"))


@record
class Limits(Declared):
    """What a choice of treatments must keep to; at most one treatment goes on a panel."""

    mass: float | None = quantity(help="largest mass added", unit="kg", low=0.0, default=None)
    cost: float | None = quantity(help="largest cost", unit="EUR", low=0.0, default=None)
    panels: int | None = quantity(help="largest number of treated panels", low=1, default=None)
    thickness: float | None = quantity(help="largest thickness of a treatment", unit="m", low=0.0, default=None)
    exclude: tuple[str, ...] = quantity(help="panels that stay as they are; names or globs", default=())
    force: tuple[str, ...] = quantity(help="panels that must be treated; names", default=())
    wanted_gain: float | None = quantity(
        help="gain that is enough: the least cost that reaches it is looked for", unit="dB", positive=True, default=None
    )

    @classmethod
    def example(cls) -> Limits:
        return cls(6.0, 90.0, 3, 0.06, ("roof",), ("console",), 2.0)


@record
class Ranges(Declared):
    """What is not known exactly, as factors about the given values (2 means from half to twice) and as plus-minus ranges."""

    damping: float = quantity(help="factor on the residual damping of every region", low=1.0, default=2.0)
    flow_resistivity: float = quantity(help="factor on the flow resistivity of porous layers", low=1.0, default=1.5)
    thickness: float = quantity(help="factor on the thickness of porous layers", low=1.0, default=1.1)
    velocity: float = quantity(help="plus-minus range of every panel's velocity level", unit="dB", low=0.0, default=2.0)
    phase: float = quantity(help="plus-minus range of every panel's phase", unit="deg", low=0.0, high=180.0, default=20.0)

    @classmethod
    def example(cls) -> Ranges:
        return cls(2.0, 1.4, 1.1, 1.0, 30.0)
