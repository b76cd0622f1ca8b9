"""The tables of kinds and of the case file, derived from the declarations.

`murmesh kinds` prints the first; the second stands in DEVELOPERS.md, where a test keeps it true:

    python -m murmesh.plugin.manual DEVELOPERS.md        rewrites it
"""

from __future__ import annotations

import dataclasses
import math
import sys
import types
import typing
from pathlib import Path
from typing import Any, Union, cast

import numpy as np

from murmesh.solver.case import boundary, catalogue, load, medium, model, motion, porous, spectrum, wall
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


# ---------------------------------------------------------------------------------------------------------------------
# the case file, for DEVELOPERS.md

BEGIN, END = "<!-- case layout: generated, do not edit -->", "<!-- end of the case layout -->"
RECORDS: dict[str, type[Declared]] = {
    "/": model.Case,
    "/mesh": model.Mesh,
    "/regions/NAME": model.Region,
    "/surfaces/NAME": model.Surface,
    "/receivers/NAME": model.Receiver,
    "/receivers/NAME/measured": model.Measured,
    "/load_cases/NAME": load.LoadCase,
    "/sweep": model.Sweep,
    "/catalogue/NAME": catalogue.Treatment,
}


def case_layout() -> str:
    """The groups of the case file and the kinds of every family, as Markdown."""
    parts = [_section(f"`{path}`", cls) for path, cls in RECORDS.items()]
    for family, cls in FAMILIES.items():
        parts.append(f"#### {family[0].upper()}{family[1:]}")
        parts += [_section(f"`{name}`", member, "#####") for name, member in sorted(cls.registry.items())]
    return "\n\n".join(parts)


def _section(title: str, cls: type, depth: str = "####") -> str:
    lines = [f"{depth} {title}", "", _first_line(cls)]
    fields = dataclasses.fields(cast(Any, cls))
    if fields:
        hints = typing.get_type_hints(cls)
        lines += ["", "| entry | stored as | unit | meaning |", "| --- | --- | --- | --- |"]
        lines += [_row(field, hints[field.name]) for field in fields]
    return "\n".join(lines)


def _row(field: dataclasses.Field[Any], hint: Any) -> str:
    meaning = _field(field).partition(": ")[2].replace("|", "/")
    return f"| `{field.name}` | {_stored(hint)} | {field.metadata.get('unit', '')} | {meaning} |"


def _stored(hint: Any) -> str:
    """How a field of this type lies in the file."""
    if typing.get_origin(hint) in (Union, types.UnionType):
        return " or ".join(_stored(option) for option in typing.get_args(hint) if option is not type(None))
    if typing.get_origin(hint) is tuple:
        items = typing.get_args(hint)
        inner = items[0]
        if isinstance(inner, type) and issubclass(inner, Declared):
            return f"list of groups ({_family_name(inner)})"
        return f"attribute, {len(items)} numbers" if inner is float else "attribute, texts"
    if typing.get_origin(hint) is np.ndarray:
        return f"dataset, {typing.get_args(typing.get_args(hint)[1])[0].__name__}"
    if isinstance(hint, type) and issubclass(hint, Declared):
        return f"group ({_family_name(hint)})"
    return f"attribute, {'text' if hint is str else hint.__name__}"


def _family_name(cls: type[Declared]) -> str:
    for name, family in FAMILIES.items():
        if family is cls:
            return name
    return cls.__name__.lower()


def with_layout(text: str) -> str:
    """`text` with what stands between the two marks replaced by the layout of today."""
    before, _, rest = text.partition(BEGIN)
    _, _, after = rest.partition(END)
    return f"{before}{BEGIN}\n\n{case_layout()}\n\n{END}{after}"


if __name__ == "__main__":
    guide = Path(sys.argv[1])
    guide.write_text(with_layout(guide.read_text(encoding="utf-8")), encoding="utf-8")
