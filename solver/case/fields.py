"""How a kind is declared once: frozen dataclasses whose fields carry unit, help and bounds.

Everything that needs to know a kind derives it from the declaration: the HDF5 layout and the job file (through
`to_tree` and `from_tree`), the validation messages, the table of kinds in the manual and the parametrised tests.

    @kind("impedance")
    class Impedance(Boundary):
        '''Locally reacting wall, Z = p / v_n.'''

        wall: WallLaw = quantity(help="impedance law of the wall")

A family is a class that derives from `Declared` directly (Boundary, Medium, WallLaw, Motion ...); `kind` enters a member
into its family's registry. A *tree* is what a file can hold: a dict of str, bool, int, float, complex, ndarray,
list of trees or tree; a member of a family carries its name under the key "kind".
"""

from __future__ import annotations

import dataclasses
import functools
import math
import types
import typing
from collections.abc import Callable, Mapping
from typing import Any, ClassVar, Self, TypeVar, Union, cast, dataclass_transform

import numpy as np

from murmesh.solver.errors import FieldError, nearest

Tree = dict[str, Any]


def quantity(
    *,
    help: str,
    unit: str = "",
    low: float = -math.inf,
    high: float = math.inf,
    positive: bool = False,
    choices: tuple[str, ...] = (),
    default: Any = dataclasses.MISSING,
) -> Any:
    """Declare a field: its help, SI unit, closed bounds (or `positive`: strictly above zero), choices and default."""
    meta = {"help": help, "unit": unit, "low": low, "high": high, "positive": positive, "choices": choices}
    if default is dataclasses.MISSING:
        return dataclasses.field(metadata=meta)
    if isinstance(default, np.ndarray):
        return dataclasses.field(default_factory=lambda: default, metadata=meta)
    return dataclasses.field(default=default, metadata=meta)


class Declared:
    """Base of all declared dataclasses: bounds are checked on construction, members are found by name."""

    kind_name: ClassVar[str] = ""
    registry: ClassVar[dict[str, type[Declared]]]

    def __init_subclass__(cls, **kwargs: Any) -> None:
        super().__init_subclass__(**kwargs)
        if Declared in cls.__bases__:
            cls.registry = {}

    def __post_init__(self) -> None:
        for field in dataclasses.fields(cast(Any, self)):
            _settle_number(self, field.name)
            _check_bounds(self, field)
        self.validate()

    def validate(self) -> None:
        """Raise FieldError if fields contradict each other; members override it."""

    def with_(self, **changes: Any) -> Self:
        """A changed copy."""
        return cast(Self, dataclasses.replace(cast(Any, self), **changes))

    @classmethod
    def member(cls, name: str) -> type[Declared]:
        """The member of this family called `name`; FieldError with the nearest known name otherwise."""
        if name not in cls.registry:
            raise FieldError(f"{cls.__name__} kind '{name}' is not known; {nearest(name, cls.registry)}")
        return cls.registry[name]


C = TypeVar("C", bound=type)


@dataclass_transform(frozen_default=True, kw_only_default=False, field_specifiers=(quantity, dataclasses.field))
def kind(name: str) -> Callable[[C], C]:
    """Make the class a frozen dataclass and enter it into its family's registry under `name`."""

    def register(cls: C) -> C:
        made: Any = dataclasses.dataclass(frozen=True, eq=False)(cls)
        made.kind_name = name
        made.registry[name] = made
        return cast(C, made)

    return register


@dataclass_transform(frozen_default=True, field_specifiers=(quantity, dataclasses.field))
def record(cls: C) -> C:
    """Make the class a frozen dataclass that belongs to no family (a part of the case with a single shape)."""
    return cast(C, dataclasses.dataclass(frozen=True, eq=False)(cls))


@functools.cache
def _hints(cls: type) -> dict[str, Any]:
    return typing.get_type_hints(cls)


def _settle_number(owner: object, name: str) -> None:
    """Give plain numbers and arrays the declared type, so that equal cases have equal checksums."""
    value, target = getattr(owner, name), _hints(cast(Any, type(owner)))[name]
    options = typing.get_args(target) if typing.get_origin(target) in (Union, types.UnionType) else (target,)
    settled: Any = value
    if isinstance(value, int | float | np.number) and not isinstance(value, bool):
        settled = complex(value) if complex in options else float(value) if float in options else value
    elif isinstance(value, tuple) and any(typing.get_args(option)[:1] == (float,) for option in options):
        settled = tuple(float(item) for item in value)
    elif isinstance(value, np.ndarray):
        settled = _array(target, value, f"{_label(type(owner))}.{name}")
    if settled is not value:
        object.__setattr__(owner, name, settled)


def _check_bounds(owner: object, field: dataclasses.Field[Any]) -> None:
    value, meta = getattr(owner, field.name), field.metadata
    name = f"{_label(type(owner))}.{field.name}"
    if meta.get("choices") and value not in meta["choices"]:
        raise FieldError(f"{name} = '{value}' is not a choice; {nearest(str(value), meta['choices'])}")
    if isinstance(value, str) or not isinstance(value, int | float | complex | np.ndarray):
        return
    number = np.asarray(value)
    if number.dtype.kind not in "iufc":
        return
    if not np.all(np.isfinite(number)):
        raise FieldError(f"{name} must be finite, but holds {value}; correct the entry")
    real, unit = np.real(number), meta.get("unit", "")
    if meta.get("positive") and np.any(real <= 0):
        raise FieldError(f"{name} = {value} {unit} must be above zero; check the value and its unit")
    if np.any(real < meta.get("low", -math.inf)) or np.any(real > meta.get("high", math.inf)):
        raise FieldError(
            f"{name} = {value} {unit} is outside {meta['low']:g} .. {meta['high']:g} {unit}; check the value and its unit"
        )


def _label(cls: type) -> str:
    return getattr(cls, "kind_name", "") or cls.__name__


# ---------------------------------------------------------------------------------------------------------------------
# objects <-> trees


def to_tree(value: object) -> Any:
    """The tree of a declared object (or of a field's value)."""
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        tree: Tree = {"kind": name} if (name := getattr(value, "kind_name", "")) else {}
        for field in dataclasses.fields(value):
            held = getattr(value, field.name)
            if held is not None:
                tree[field.name] = to_tree(held)
        return tree
    if isinstance(value, tuple | list):
        return [to_tree(item) for item in value]
    if isinstance(value, Mapping):
        return {key: to_tree(item) for key, item in value.items()}
    return value


def from_tree(cls: type[Any], tree: object, where: str = "") -> Any:
    """Build `cls` (a record, a family or one of its kinds) from a tree.

    Raises FieldError naming `where`, the unknown key and the nearest known one, or the missing field.
    """
    where = where or _label(cls)
    if not isinstance(tree, Mapping):
        raise FieldError(f"{where}: expected a table of {cls.__name__} fields, got {tree!r}")
    entries = dict(tree)
    if hasattr(cls, "registry") and not dataclasses.is_dataclass(cls):
        if "kind" not in entries:
            raise FieldError(f"{where}: the key 'kind' is missing; {nearest('', cls.registry)}")
        cls = _member_at(cls, str(entries["kind"]), where)
    entries.pop("kind", None)
    return _construct(cls, entries, where)


def _member_at(cls: type[Any], name: str, where: str) -> type[Any]:
    try:
        return cast(type[Any], cls.member(name))
    except FieldError as error:
        raise FieldError(f"{where}: {error}") from None


def _construct(cls: type[Any], entries: Tree, where: str) -> Any:
    fields = {field.name: field for field in dataclasses.fields(cls)}
    for key in entries:
        if key not in fields:
            raise FieldError(f"{where}: unknown key '{key}'; {nearest(key, fields)}")
    types_ = _hints(cast(Any, cls))
    for name, field in fields.items():
        required = field.default is dataclasses.MISSING and field.default_factory is dataclasses.MISSING
        if required and name not in entries:
            unit = f" [{field.metadata['unit']}]" if field.metadata.get("unit") else ""
            raise FieldError(f"{where}: '{name}'{unit} is missing ({field.metadata.get('help', '')})")
    values = {key: _convert(types_[key], value, f"{where}/{key}") for key, value in entries.items()}
    try:
        return cls(**values)
    except FieldError as error:
        raise FieldError(f"{where}: {error}") from None


def _convert(target: Any, value: object, where: str) -> Any:
    origin = typing.get_origin(target)
    if origin in (Union, types.UnionType):
        return _convert_union(typing.get_args(target), value, where)
    if origin is tuple:
        return _convert_tuple(typing.get_args(target), value, where)
    if origin is dict:
        item = typing.get_args(target)[1]
        return {key: _convert(item, held, f"{where}/{key}") for key, held in cast(Tree, value).items()}
    if origin is np.ndarray or target is np.ndarray:
        return _array(target, value, where)
    if isinstance(target, type) and issubclass(target, Declared):
        return value if isinstance(value, target) else from_tree(target, value, where)
    return _scalar(target, value, where)


def _convert_union(options: tuple[Any, ...], value: object, where: str) -> Any:
    if value is None:
        return None
    declared = [o for o in options if isinstance(o, type) and issubclass(o, Declared)]
    if declared and isinstance(value, Mapping | Declared) and not _is_complex_table(value):
        return _convert(declared[0], value, where)
    rest = [o for o in options if o not in declared and o is not type(None)]
    if not rest:
        return _convert(declared[0], value, where)
    return _convert(rest[0], value, where)


def _convert_tuple(items: tuple[Any, ...], value: object, where: str) -> Any:
    if not isinstance(value, list | tuple | np.ndarray):
        raise FieldError(f"{where}: expected a list, got {value!r}")
    if len(items) == 2 and items[1] is Ellipsis:
        return tuple(_convert(items[0], held, f"{where}/{_item_name(held, i)}") for i, held in enumerate(value))
    if len(items) != len(value):
        raise FieldError(f"{where}: expected {len(items)} values, got {len(value)}")
    return tuple(_convert(t, held, f"{where}/{i}") for i, (t, held) in enumerate(zip(items, value, strict=True)))


def _item_name(item: object, index: int) -> str:
    return str(item["name"]) if isinstance(item, Mapping) and "name" in item else str(index)


def _array(target: Any, value: object, where: str) -> Any:
    args = typing.get_args(target)
    dtype = typing.get_args(args[1])[0] if len(args) == 2 and typing.get_args(args[1]) else None
    if isinstance(value, list) and any(_is_complex_table(item) for item in value):
        value = [_complex(item, where) for item in value]
    try:
        return np.asarray(value, dtype=dtype)
    except (TypeError, ValueError):
        raise FieldError(f"{where}: expected an array of numbers, got {value!r}") from None


def _is_complex_table(value: object) -> bool:
    return isinstance(value, Mapping) and bool(value) and set(value) <= {"re", "im"}


def _complex(value: object, where: str) -> complex:
    if _is_complex_table(value):
        parts = cast(Mapping[str, Any], value)
        return complex(float(parts.get("re", 0.0)), float(parts.get("im", 0.0)))
    if isinstance(value, bool | str) or not isinstance(value, int | float | complex | np.number):
        raise FieldError(f"{where}: expected a number or a table {{re, im}}, got {value!r}")
    return complex(value)


def _scalar(target: Any, value: object, where: str) -> Any:
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, bytes):
        value = value.decode()
    if target is complex:
        return _complex(value, where)
    if target is float and isinstance(value, int) and not isinstance(value, bool):
        return float(value)
    if target in (float, int, str, bool):
        if type(value) is not target:
            raise FieldError(f"{where}: expected {target.__name__}, got {value!r}")
        return value
    raise FieldError(f"{where}: cannot hold a value of type {target}")  # pragma: no cover
