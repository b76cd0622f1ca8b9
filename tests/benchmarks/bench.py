"""What a benchmark is: a function that yields rows, registered under a name.

@benchmark("assembly")
def assembly(quick: bool) -> Iterator[Row]: ...
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

import scipy.sparse as sp

T = TypeVar("T")
Benchmark = Callable[[bool], Iterator["Row"]]
BENCHMARKS: dict[str, Benchmark] = {}


@dataclass(frozen=True)
class Row:
    """One line of the table. `target` is an upper bound, or a lower one with `at_least`; None: for information."""

    name: str
    value: float
    unit: str
    compared_with: str = ""
    target: float | None = None
    at_least: bool = False

    @property
    def met(self) -> bool | None:
        """Whether the target is met; None without a target or a value."""
        if self.target is None or math.isnan(self.value):
            return None
        return self.value >= self.target if self.at_least else self.value <= self.target


def benchmark(name: str) -> Callable[[Benchmark], Benchmark]:
    """Register a function of `quick` (a smaller, faster run) that yields rows."""

    def register(function: Benchmark) -> Benchmark:
        BENCHMARKS[name] = function
        return function

    return register


def timed(work: Callable[[], T], clock: Callable[[], float] = time.perf_counter) -> tuple[T, float]:
    """The result, and seconds by `clock` (time.process_time for CPU seconds)."""
    start = clock()
    result = work()
    return result, clock() - start


def best_of(count: int, work: Callable[[], object], clock: Callable[[], float] = time.perf_counter) -> float:
    """The fewest seconds of `count` runs: other work on the machine only adds."""
    return min(timed(work, clock)[1] for _ in range(count))


def peaked(work: Callable[[], T]) -> tuple[T, float]:
    """The result, and the MiB that the process held at most above what it held before; nan where Linux is not asked."""
    try:
        Path("/proc/self/clear_refs").write_text("5")
        before = _held("VmRSS")
    except OSError:
        return work(), math.nan
    result = work()
    return result, _held("VmHWM") - before


def _held(field: str) -> float:
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith(field):
            return float(line.split()[1]) / 1024
    return math.nan


def lower(matrix: sp.csr_matrix) -> sp.csc_matrix:
    """What the symmetric solver is given: the lower triangle, CSC, sorted."""
    out = sp.csc_matrix(sp.tril(matrix))
    out.sort_indices()
    return out


def exponent(sizes: list[float], values: list[float]) -> float:
    """e of values ~ sizes^e by least squares of the logarithms."""
    x, y = ([math.log(v) for v in series] for series in (sizes, values))
    mx, my = sum(x) / len(x), sum(y) / len(y)
    return sum((a - mx) * (b - my) for a, b in zip(x, y, strict=True)) / sum((a - mx) ** 2 for a in x)
