"""The table of kinds, derived from their declarations: printed by `murmesh kinds`, kept in DEVELOPERS.md by a test."""

from __future__ import annotations

import dataclasses
import math
from typing import Any, cast

from murmesh.solver.case import boundary, load, medium, motion, porous, spectrum, wall
from murmesh.solver.case.fields import Declared

FAMILIES: dict[str, type[Declared]] = {
    "boundary kinds": boundary.Boundary,
    "loads": load.Load,
    "combinations of loads": load.Combination,
    "motions": motion.Motion,
    "spectra": spectrum.Spectrum,
    "wall laws": wall.WallLaw,
    "layers": wall.Layer,
    "porous laws": porous.PorousLaw,
    "media": medium.Medium,
    "damping": medium.Damping,
}


def table_of_kinds(family: str = "") -> str:
    """All families (or one) with their kinds, and each kind's fields with unit, bounds, default and help."""
    chosen = {name: cls for name, cls in FAMILIES.items() if family in ("", name)}
    return "\n\n".join(_family(name, cls) for name, cls in chosen.items())


def _family(name: str, cls: type[Declared]) -> str:
    parts = [name.upper()]
    for kind_name, member in sorted(cls.registry.items()):
        parts.append(f"  {kind_name}: {_first_line(member)}")
        parts += [f"      {_field(field)}" for field in dataclasses.fields(cast(Any, member))]
    return "\n".join(parts)


def _first_line(cls: type) -> str:
    return (cls.__doc__ or "").strip().splitlines()[0]


def _field(field: dataclasses.Field[Any]) -> str:
    meta = field.metadata
    unit = f" [{meta['unit']}]" if meta.get("unit") else ""
    words = [f"{field.name}{unit}: {meta.get('help', '')}"]
    if meta.get("choices"):
        words.append(f"one of {', '.join(meta['choices'])}")
    words += _bounds(meta)
    if field.default is dataclasses.MISSING and field.default_factory is dataclasses.MISSING:
        words.append("required")
    elif isinstance(field.default, int | float | str | bool) and field.default != "":
        words.append(f"default {field.default}")
    return "; ".join(words)


def _bounds(meta: Any) -> list[str]:
    if meta.get("positive"):
        return ["> 0"]
    low, high = meta.get("low", -math.inf), meta.get("high", math.inf)
    if math.isfinite(low) and math.isfinite(high):
        return [f"{low:g} .. {high:g}"]
    if math.isfinite(low):
        return [f">= {low:g}"]
    return [f"<= {high:g}"] if math.isfinite(high) else []
