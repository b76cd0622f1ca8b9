"""Treatments: what can be applied to a panel, what it weighs and what it costs."""

from __future__ import annotations

from murmesh.solver.case.fields import Declared, quantity, record
from murmesh.solver.case.spectrum import Spectrum
from murmesh.solver.case.wall import Layers, WallLaw
from murmesh.solver.errors import FieldError


@record
class Treatment(Declared):
    """A treatment changes a panel's impedance, its velocity, or both."""

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

    @classmethod
    def example(cls) -> Treatment:
        return cls("foam", 1.5, 12.0, 0.05, Layers.example(), "auto", 3.0, ("roof", "door_*"))
