"""A list of things murmesh can make from a result: pictures, exports. Each member is one file that enters itself.

PICTURES = Products(__name__)                      in the package's __init__.py
@PICTURES.member("cut_plane", ".png", "...")       above `draw(result, path, **options)` in a file of the package
"""

from __future__ import annotations

import importlib
import inspect
import pkgutil
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

from murmesh.solver.errors import ResultError, nearest
from murmesh.solver.result import Result

OUTSIDE = "outside"
"""Source of members that take a result in which something radiates."""
Maker = TypeVar("Maker", bound=Callable[..., Path])


@dataclass(frozen=True)
class Product:
    """One member: `make(source, path, **options) -> path`; the source is a Result unless said otherwise."""

    name: str
    suffix: str
    summary: str
    make: Callable[..., Path]
    renders: bool = False
    source: str = "result"

    @property
    def options(self) -> tuple[str, ...]:
        """Names of the keyword options it takes."""
        return tuple(inspect.signature(self.make).parameters)[2:]

    @property
    def file_name(self) -> str:
        """Name of its file in a folder: the member's name, without the suffix it may end with."""
        stem = self.name.removesuffix(self.suffix.replace(".", "_"))
        return f"{'field' if stem == self.suffix.lstrip('.') else stem}{self.suffix}"

    def taking(self, **given: object) -> dict[str, object]:
        """Those of the given options that this member takes and that are not None."""
        return {key: value for key, value in given.items() if key in self.options and value is not None}


class Products:
    """The members of one package, in the order of their names."""

    def __init__(self, package: str) -> None:
        self._package = package
        self._members: dict[str, Product] = {}

    def member(
        self, name: str, suffix: str, summary: str, *, renders: bool = False, source: str = "result"
    ) -> Callable[[Maker], Maker]:
        """Decorator that enters a maker. `renders`: it draws in three dimensions and needs the system's GL."""

        def enter(make: Maker) -> Maker:
            self._members[name] = Product(name, suffix, summary, make, renders, source)
            return make

        return enter

    def all(self) -> dict[str, Product]:
        """Every member by name; imports every file of the package."""
        for module in pkgutil.iter_modules(importlib.import_module(self._package).__path__):
            importlib.import_module(f"{self._package}.{module.name}")
        return dict(sorted(self._members.items()))

    def __getitem__(self, name: str) -> Product:
        known = self.all()
        if name not in known:
            raise ResultError(f"there is no '{name}' to make; {nearest(name, known)}")
        return known[name]

    def of(self, result: Result) -> list[Product]:
        """The members that this result can be given to: those of the outside only where something radiates."""
        return [p for p in self if p.source == "result" or (p.source == OUTSIDE and result.radiates)]

    def __iter__(self) -> Iterator[Product]:
        return iter(self.all().values())
