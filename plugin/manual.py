"""The tables of kinds, of the case file and of tables that only a job has, derived from the declarations.

`murmesh kinds` prints the first; the second stands in DEVELOPERS.md, where a test keeps it true:

    python -m murmesh.plugin.manual DEVELOPERS.md        rewrites it
"""

from __future__ import annotations

import dataclasses
import inspect
import math
import re
import sys
import textwrap
import types
import typing
from collections.abc import Iterable, Iterator, Mapping
from pathlib import Path
from typing import Any, Union, cast

import numpy as np

from murmesh.plugin.wrapping import Wrap
from murmesh.solver.case import boundary, catalogue, load, medium, model, motion, porous, spectrum, wall
from murmesh.solver.case.fields import Declared
from murmesh.solver.errors import CaseError

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
    "/limits": catalogue.Limits,
    "/ranges": catalogue.Ranges,
}
JOB_TABLES: dict[str, type[Declared]] = {"[wrap]": Wrap}
"""Tables of a job file that are used up when the mesh is made, so that no case holds them."""
SCALARS: dict[type, str] = {str: "text", bool: "true or false", int: "whole number", float: "number", complex: "complex"}
_WIDTH = 118
_LEGEND = """\
A kind is a table with kind = "NAME" and its fields; those 'left out' or with a default need not be given. complex: a number
or {re, im}. numbers: a list. spectrum: one of the spectra; a job file may say {csv = "FILE", column = "NAME"} instead."""


# ---------------------------------------------------------------------------------------------------------------------
# one field


@dataclasses.dataclass(frozen=True)
class Entry:
    """A field in words: what it takes, how it lies in the file, its unit, bounds or choices, and its default."""

    name: str
    takes: str
    stored: str
    unit: str
    bounds: str
    default: str
    help: str


def entries(cls: type[Declared]) -> list[Entry]:
    """The fields of a record or kind."""
    hints = typing.get_type_hints(cls)
    return [_entry(field, hints[field.name]) for field in dataclasses.fields(cast(Any, cls))]


def _entry(field: dataclasses.Field[Any], hint: Any) -> Entry:
    meta = field.metadata
    bounds = " / ".join(meta["choices"]) if meta.get("choices") else _bounds(meta)
    return Entry(field.name, _takes(hint), _stored(hint), meta.get("unit", ""), bounds, _default(field), meta.get("help", ""))


def _bounds(meta: Mapping[str, Any]) -> str:
    low, high = meta.get("low", -math.inf), meta.get("high", math.inf)
    if meta.get("positive"):
        return "> 0"
    if math.isfinite(low) and math.isfinite(high):
        return f"{low:g} .. {high:g}"
    if math.isfinite(low):
        return f">= {low:g}"
    return f"<= {high:g}" if math.isfinite(high) else ""


def _default(field: dataclasses.Field[Any]) -> str:
    if field.default is dataclasses.MISSING and field.default_factory is dataclasses.MISSING:
        return "required"
    value = field.default if field.default is not dataclasses.MISSING else cast(Any, field.default_factory)()
    if value is None:
        return "left out"
    if isinstance(value, Declared):
        return value.kind_name
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, tuple | np.ndarray):
        return ", ".join(str(item) for item in value) or "empty"
    return f"{value:g}" if isinstance(value, float) else str(value) or "empty"


def _options(hint: Any) -> list[Any]:
    """The alternatives of a type, without None."""
    union = typing.get_origin(hint) in (Union, types.UnionType)
    return [option for option in typing.get_args(hint) if option is not type(None)] if union else [hint]


def _is_declared(hint: Any) -> bool:
    return isinstance(hint, type) and issubclass(hint, Declared)


def _element(hint: Any) -> Any:
    """What an array or a tuple holds."""
    args = typing.get_args(hint)
    return typing.get_args(args[1])[0] if typing.get_origin(hint) is np.ndarray else args[0]


def _takes(hint: Any) -> str:
    """What a person may write into a field of this type."""
    return " or ".join(_takes_one(option) for option in _options(hint))


def _takes_one(hint: Any) -> str:
    if typing.get_origin(hint) is np.ndarray:
        return "complex numbers" if issubclass(_element(hint), np.complexfloating) else "numbers"
    if typing.get_origin(hint) is tuple:
        item, length = _element(hint), len(typing.get_args(hint))
        if _is_declared(item):
            return f"list of {plural(item)}"
        return f"{length} numbers" if item is float else "list of texts"
    return singular(hint) if _is_declared(hint) else SCALARS[hint]


def _stored(hint: Any) -> str:
    """How a field of this type lies in the file."""
    return " or ".join(_stored_one(option) for option in _options(hint))


def _stored_one(hint: Any) -> str:
    if typing.get_origin(hint) is np.ndarray:
        return f"dataset, {_element(hint).__name__}"
    if typing.get_origin(hint) is tuple:
        return f"list: {plural(_element(hint))}" if _is_declared(_element(hint)) else f"attribute, {_takes_one(hint)}"
    return f"group: {singular(hint)}" if _is_declared(hint) else f"attribute, {SCALARS[hint]}"


def singular(cls: type[Declared]) -> str:
    """One of a family or record in words: WallLaw is "wall law"."""
    if cls is boundary.Boundary:
        return "boundary kind"
    return re.sub(r"(?<=[a-z])(?=[A-Z])", " ", cls.__name__).lower()


def plural(cls: type[Declared]) -> str:
    """Several of a family or record."""
    return next((name for name, family in FAMILIES.items() if family is cls), f"{singular(cls)}s")


def homes(cls: type[Declared]) -> list[str]:
    """Where a family may stand: the fields that take one."""
    owners = [*RECORDS.items(), *(item for family in FAMILIES.values() for item in family.registry.items())]
    found = set()
    for owner, member in owners:
        for name, hint in typing.get_type_hints(member).items():
            if cls in _options(hint) or (typing.get_origin(hint) is tuple and _element(hint) is cls):
                found.add(f"{owner}/{name}" if owner.startswith("/") else f"{owner}.{name}")
    return sorted(found, key=lambda place: (not place.startswith("/"), place))


# ---------------------------------------------------------------------------------------------------------------------
# for the terminal


def table_of_kinds(family: str = "") -> str:
    """All families (or one) with their kinds, and what each field takes: unit, bounds, default and help."""
    if family and family not in FAMILIES:
        raise CaseError(f"no family is called '{family}'; expected one of {', '.join(FAMILIES)}")
    chosen = [_family(name, cls) for name, cls in FAMILIES.items() if family in ("", name)]
    tables = [f"OF A JOB FILE\n\n{_kind(name, cls)}" for name, cls in JOB_TABLES.items() if not family]
    return "\n\n".join([*chosen, *tables, _LEGEND])


def _family(name: str, cls: type[Declared]) -> str:
    places = f"{name.upper()}   {', '.join(homes(cls))}"
    parts = [textwrap.fill(places, _WIDTH, subsequent_indent=" " * (len(name) + 3))]
    parts += [_kind(kind_name, member) for kind_name, member in sorted(cls.registry.items())]
    return "\n\n".join(parts)


def _kind(name: str, cls: type[Declared]) -> str:
    lines = [f"  {name}", textwrap.indent(inspect.cleandoc(cls.__doc__ or ""), "      ")]
    rows = [(entry.name, _what(entry), _else(entry), entry.help) for entry in entries(cls)]
    widths = [max((len(row[column]) for row in rows), default=0) for column in range(3)]
    for row in rows:
        cells = "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=False))
        lines += textwrap.wrap(f"{cells}  {row[3]}", _WIDTH, **_hanging(sum(widths) + 6))
    return "\n".join(lines)


def _hanging(depth: int) -> dict[str, Any]:
    """Room for the first columns; a table as wide as half a line has its help continued further to the left."""
    room = " " * (8 + (depth if depth < _WIDTH * 0.6 else 4))
    return {"initial_indent": " " * 8, "subsequent_indent": room, "drop_whitespace": True, "break_on_hyphens": False}


def _what(entry: Entry) -> str:
    unit = f" [{entry.unit}]" if entry.unit else ""
    if entry.bounds and entry.takes == "text":
        return entry.bounds
    return f"{entry.takes}{unit}{f', {entry.bounds}' if entry.bounds else ''}"


def _else(entry: Entry) -> str:
    return entry.default if entry.default in ("required", "left out") else f"default {entry.default}"


# ---------------------------------------------------------------------------------------------------------------------
# the case file, for DEVELOPERS.md

BEGIN, END = "<!-- case layout: generated, do not edit -->", "<!-- end of the case layout -->"
_HEAD = ["| entry | stored as | unit | bounds | default | meaning |", "| --- | --- | --- | --- | --- | --- |"]


def case_layout() -> str:
    """The groups of the case file and the kinds of every family, as Markdown."""
    parts = [_record_section(path, cls) for path, cls in RECORDS.items()]
    parts += [_family_section(family, cls) for family, cls in FAMILIES.items()]
    parts += [_job_section(name, cls) for name, cls in JOB_TABLES.items()]
    return "\n\n".join(parts)


def _record_section(path: str, cls: type[Declared]) -> str:
    about = " ".join(inspect.cleandoc(cls.__doc__ or "").split())
    return "\n".join([f"#### `{path}`", "", about, "", *_HEAD, *(_row(entry) for entry in entries(cls))])


def _family_section(family: str, cls: type[Declared]) -> str:
    places = ", ".join(f"`{place}`" for place in homes(cls))
    return "\n".join(
        [f"#### {family[0].upper()}{family[1:]}", "", f"Stand in {places}.", "", *_HEAD, *_kind_rows(cls.registry.items())]
    )


def _job_section(name: str, cls: type[Declared]) -> str:
    about = " ".join(inspect.cleandoc(cls.__doc__ or "").split())
    head = [f"#### `{name}`, of a job file only", "", about, "", _HEAD[0].replace("stored as", "takes"), _HEAD[1]]
    return "\n".join([*head, *(_row(dataclasses.replace(entry, stored=entry.takes)) for entry in entries(cls))])


def _kind_rows(members: Iterable[tuple[str, type[Declared]]]) -> Iterator[str]:
    for name, member in sorted(members):
        about = " ".join(inspect.cleandoc(member.__doc__ or "").split("\n\n")[0].split())
        yield _cells(f"**`{name}`**", "", "", "", "", about)
        yield from (_row(entry) for entry in entries(member))


def _row(entry: Entry) -> str:
    return _cells(f"`{entry.name}`", entry.stored, entry.unit, entry.bounds, entry.default, entry.help)


def _cells(*cells: str) -> str:
    return f"| {' | '.join(cell.replace('|', chr(92) + '|') for cell in cells)} |"


def with_layout(text: str) -> str:
    """`text` with what stands between the two marks replaced by the layout of today.

    Raises CaseError if the marks are missing: nothing is written beside them.
    """
    before, begin, rest = text.partition(BEGIN)
    _, end, after = rest.partition(END)
    if not (begin and end):
        raise CaseError(f"the text has no place for the layout; put the lines '{BEGIN}' and '{END}' where it belongs")
    return f"{before}{BEGIN}\n\n{case_layout()}\n\n{END}{after}"


def main(path: str) -> None:
    """Rewrite the layout in the file `path`."""
    guide = Path(path)
    guide.write_text(with_layout(guide.read_text(encoding="utf-8")), encoding="utf-8")


if __name__ == "__main__":
    main(*sys.argv[1:])
