"""Declared records in words, and what differs between two of them: by reflection over their fields, so that a new kind needs
nothing here."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from murmesh.solver.case.model import Mesh

ABSENT = "not there"
_ROUND_OFF = 1e-12
"""Part of the largest value below which numbers count as equal: the last digits of a unit's conversion."""


@dataclass(frozen=True)
class Change:
    """One difference: where, what it was, what it is."""

    where: str
    before: str
    after: str


def words(value: object, unit: str = "") -> str:
    """A value as people read it; declared kinds as `kind (field value unit, ...)`."""
    if value is None:
        return "none"
    if isinstance(value, Mesh):
        return f"{len(value.tets):,} tetrahedra of order {1 if value.tets.shape[1] == 4 else 2}, {len(value.nodes):,} nodes"
    if dataclasses.is_dataclass(value):
        return _record_words(value)
    if isinstance(value, np.ndarray):
        return _array_words(value, unit)
    if isinstance(value, tuple | list):
        return f"({', '.join(words(item) for item in value)})" + _unit(unit) if value else "none"
    if isinstance(value, Mapping):
        return ", ".join(f"{key}: {words(item)}" for key, item in value.items()) or "none"
    return _plain(value) + _unit(unit)


def _record_words(value: Any) -> str:
    """The kind (or nothing) and those fields that are not at their default."""
    inside = [f"{name.replace('_', ' ')} {words(held, unit)}" for name, held, unit in told_fields(value)]
    kind = str(getattr(value, "kind_name", "")).replace("_", " ")
    listed = ", ".join(inside)
    return f"{kind} ({listed})" if kind and listed else kind or listed


def told_fields(value: Any) -> list[tuple[str, object, str]]:
    """(name, value, unit) of the fields of a record that differ from their default."""
    found = []
    for field in dataclasses.fields(value):
        held = getattr(value, field.name)
        default = field.default_factory() if field.default_factory is not dataclasses.MISSING else field.default
        if default is dataclasses.MISSING or not same(held, default):
            found.append((field.name, held, str(field.metadata.get("unit", ""))))
    return found


def _array_words(value: np.ndarray[Any, Any], unit: str) -> str:
    if not value.size:
        return "none"
    if value.size <= 4 and value.ndim == 1:
        return ", ".join(_plain(item) for item in value) + _unit(unit)
    if value.dtype.kind == "c" and not np.any(value.imag):
        value = value.real
    size = " × ".join(str(n) for n in value.shape)
    if value.dtype.kind not in "iuf":
        return f"{size} complex values up to {float(np.abs(value).max()):.4g}{_unit(unit)}"
    return f"{size} values, {float(value.min()):.4g} .. {float(value.max()):.4g}{_unit(unit)}"


def _plain(value: object) -> str:
    if isinstance(value, bool | str | np.bool_):
        return str(value)
    if isinstance(value, complex | np.complexfloating):
        return f"{value.real:.4g}{value.imag:+.4g}i" if value.imag else f"{value.real:.4g}"
    if isinstance(value, float | np.floating):
        return f"{value:.6g}"
    return str(value)


def _unit(unit: str) -> str:
    return f" {unit}" if unit else ""


def same(a: object, b: object) -> bool:
    """Whether two values are equal but for rounding."""
    return next(differences(a, b), None) is None


def differences(a: object, b: object, where: str = "", unit: str = "") -> Iterator[Change]:
    """Every difference between two values, the smallest parts that can be named; lists are matched by name."""
    if isinstance(a, Mesh) and isinstance(b, Mesh):
        yield from _mesh_differences(a, b, where)
    elif dataclasses.is_dataclass(a) and dataclasses.is_dataclass(b) and type(a) is type(b):
        for field in dataclasses.fields(a):
            held = getattr(a, field.name), getattr(b, field.name)
            yield from differences(*held, _below(where, field.name), str(field.metadata.get("unit", "")))
    elif isinstance(a, tuple) and isinstance(b, tuple) and _named(a) and _named(b):
        yield from _by_name({x.name: x for x in a}, {x.name: x for x in b}, where)
    elif isinstance(a, Mapping) and isinstance(b, Mapping):
        yield from _by_name(a, b, where)
    elif not _equal(a, b):
        yield Change(where, *_distinct(words(a, unit), words(b, unit), a, b))


def _by_name(a: Mapping[str, object], b: Mapping[str, object], where: str) -> Iterator[Change]:
    for name in dict.fromkeys([*a, *b]):
        at = _below(where, name)
        if name not in b:
            yield Change(at, words(a[name]), ABSENT)
        elif name not in a:
            yield Change(at, ABSENT, words(b[name]))
        else:
            yield from differences(a[name], b[name], at)


def _mesh_differences(a: Mesh, b: Mesh, where: str) -> Iterator[Change]:
    if words(a) != words(b):
        yield Change(where, words(a), words(b))
    elif not (_equal(a.tets, b.tets) and _equal(a.triangles, b.triangles)):
        yield Change(where, words(a), f"{words(b)}, joined otherwise")
    elif not _equal(a.nodes, b.nodes):
        moved = float(np.linalg.norm(b.nodes - a.nodes, axis=1).max())
        yield Change(where, words(a), f"the same, nodes moved by up to {1000 * moved:.3g} mm")
    elif not (_equal(a.tet_region, b.tet_region) and _equal(a.triangle_surface, b.triangle_surface)):
        yield Change(where, words(a), "the same, with other regions or surfaces on it")


def _distinct(before: str, after: str, a: object, b: object) -> tuple[str, str]:
    """Two texts that differ: long lists of numbers may read alike, so the largest change is said."""
    if before != after:
        return before, after
    if isinstance(a, np.ndarray) and isinstance(b, np.ndarray):
        return before, f"the same range, values changed by up to {float(np.abs(b - a).max()):.4g}"
    return before, f"{after} (differs in digits not shown)"


def _named(items: tuple[Any, ...]) -> bool:
    return all(isinstance(getattr(item, "name", None), str) for item in items)


def _equal(a: object, b: object) -> bool:
    numbers = (bool, int, float, complex, np.ndarray, np.generic)
    if isinstance(a, numbers) and isinstance(b, numbers):
        x, y = np.asarray(a), np.asarray(b)
        if x.shape != y.shape or x.dtype.kind not in "biufc" or y.dtype.kind not in "biufc":
            return False
        scale = float(np.max(np.abs(x.astype(complex)), initial=0.0))
        return bool(np.all(np.abs(x.astype(complex) - y.astype(complex)) <= _ROUND_OFF * scale))
    if isinstance(a, tuple) and isinstance(b, tuple):
        return len(a) == len(b) and all(same(x, y) for x, y in zip(a, b, strict=True))
    return type(a) is type(b) and a == b


def _below(where: str, name: str) -> str:
    return f"{where}/{name}" if where else name
