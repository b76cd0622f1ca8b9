"""The fields of records and kinds as rows of a tree, derived from their declarations: label, unit, help, bounds, choices.

A row holds a number, a text or a choice. What is neither (complex numbers, spectra, lists, file references) is shown and
edited as a person writes it in a job file: `{ re = 4.0, im = -6.0 }`, `[0.5, 0.1, 1.2]`, `{ csv = "doors.csv" }`.
"""

from __future__ import annotations

import dataclasses
import math
import tomllib
import types
import typing
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any, Union, cast

import numpy as np

from murmesh.plugin.job_text import toml_value
from murmesh.plugin.window.document import REMOVED, Path_
from murmesh.solver.case.fields import Declared, to_tree
from murmesh.solver.errors import FieldError

Value = float | str


@dataclass(frozen=True)
class Row:
    """One parameter: where it stands in the job, how it is called, what it holds.

    `form` says how `value` is read back: number, whole, flag, choice, text, or toml.
    """

    path: Path_
    label: str
    value: Value
    form: str
    help: str = ""
    unit: str = ""
    low: float = -math.inf
    high: float = math.inf
    choices: tuple[str, ...] = ()
    family: type[Declared] | None = None
    required: bool = True

    @property
    def title(self) -> str:
        """The label with its unit."""
        words = self.label.replace("_", " ")
        return f"{words} [{self.unit}]" if self.unit else words


def rows(cls: Any, tree: Mapping[str, Any], path: Path_, without: tuple[str, ...] = ()) -> Iterator[Row]:
    """A row per field of a record or kind, those of the kinds it holds below their choice."""
    hints = typing.get_type_hints(cls)
    for field in dataclasses.fields(cls):
        if field.name not in without:
            yield from _field(field, hints[field.name], tree.get(field.name, REMOVED), (*path, field.name))


def kind_rows(family: type[Declared], tree: Mapping[str, Any], path: Path_, label: str, help: str = "") -> Iterator[Row]:
    """The choice of a kind, then the fields of the kind chosen."""
    name = str(tree.get("kind", ""))
    yield Row((*path, "kind"), label, name, "choice", help, choices=tuple(family.registry), family=family)
    if name in family.registry:
        yield from rows(family.registry[name], tree, path)


def _field(field: dataclasses.Field[Any], hint: Any, held: Any, path: Path_) -> Iterator[Row]:
    meta, required, options = field.metadata, _required(field), _options(hint)
    value = _default(field) if held is REMOVED else held
    about: Any = {"help": meta.get("help", ""), "unit": meta.get("unit", ""), "required": required}
    family = _family(options)
    if family is not None and isinstance(value, Mapping) and "kind" in value:
        yield from kind_rows(family, value, path, field.name, about["help"])
        return
    form = _form(options, meta, value)
    limits = (0.0 if meta.get("positive") else meta.get("low", -math.inf)), meta.get("high", math.inf)
    shown = _shown(form, value)
    yield Row(path, field.name, shown, form, low=limits[0], high=limits[1], choices=meta.get("choices", ()), **about)


def _required(field: dataclasses.Field[Any]) -> bool:
    return field.default is dataclasses.MISSING and field.default_factory is dataclasses.MISSING


def _default(field: dataclasses.Field[Any]) -> Any:
    if field.default is not dataclasses.MISSING:
        return plain_value(field.default)
    return None if _required(field) else plain_value(cast(Any, field.default_factory)())


def plain_value(value: Any) -> Any:
    """A value of a declaration as a job file holds it."""
    return _plain(to_tree(value))


def _plain(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple | np.ndarray):
        return [_plain(item) for item in (value.tolist() if isinstance(value, np.ndarray) else value)]
    if isinstance(value, complex):
        return {"re": value.real, "im": value.imag} if value.imag else value.real
    return value


def _options(hint: Any) -> list[Any]:
    union = typing.get_origin(hint) in (Union, types.UnionType)
    return [option for option in typing.get_args(hint) if option is not type(None)] if union else [hint]


def _family(options: list[Any]) -> type[Declared] | None:
    """The family among the alternatives of a type: a class of kinds, not one kind or a record."""
    for option in options:
        if isinstance(option, type) and issubclass(option, Declared) and not dataclasses.is_dataclass(option):
            return option
    return None


def _form(options: list[Any], meta: Mapping[str, Any], value: Any) -> str:
    if meta.get("choices"):
        return "choice"
    # a spectrum may stand where a number does, so such a field takes whatever a job file takes
    single = options[0] if len(options) == 1 else None
    wanted = {bool: "flag", int: "whole", float: "number", str: "text"}.get(cast(Any, single), "toml")
    fits = {"flag": bool, "whole": int, "number": int | float, "text": str}.get(wanted)
    return wanted if fits is not None and isinstance(value, cast(Any, fits)) else "toml"


def _shown(form: str, value: Any) -> Value:
    if value is None:
        return ""
    if form in ("number", "whole", "flag"):
        return float(value)
    return str(value) if form in ("choice", "text") else toml_value(value)


def read_back(row: Row, shown: Value) -> Any:
    """The value that a person means by what stands in a row; REMOVED for nothing in a field that need not be given.

    Raises FieldError with an example where it cannot be read.
    """
    if row.form == "flag":
        return bool(shown)
    if row.form == "whole":
        return int(float(shown))
    if row.form == "number":
        return float(shown)
    text = str(shown).strip()
    if row.form == "text":
        return text
    if not text:
        return REMOVED
    return text if row.form == "choice" else _from_text(row, text)


def _from_text(row: Row, text: str) -> Any:
    for written in (text, f'"{text}"' if text.replace("_", "").isalnum() else text):
        try:
            return tomllib.loads(f"value = {written}")["value"]
        except tomllib.TOMLDecodeError:
            continue
    try:
        number = complex(text.replace(" ", "").replace("i", "j"))
    except ValueError:
        raise FieldError(
            f"{row.title}: '{text}' cannot be read; write a number, 4.0-6.0j, [1.0, 2.0], or a table as in a job file"
        ) from None
    return {"re": number.real, "im": number.imag}


def starting_tree(family: type[Declared], name: str, before: Mapping[str, Any]) -> dict[str, Any]:
    """A kind newly chosen: what it shares with the kind before is kept, what it requires is taken from its example."""
    member: Any = family.member(name)
    example = plain_value(member.example())
    tree: dict[str, Any] = {"kind": name}
    for field in dataclasses.fields(member):
        if field.name in before:
            tree[field.name] = before[field.name]
        elif _required(field):
            tree[field.name] = example[field.name]
    return tree
