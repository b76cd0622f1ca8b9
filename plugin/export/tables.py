"""Tables as CSV with their conventions on top, and numbers as they are written in them."""

from __future__ import annotations

import csv
from collections.abc import Iterable, Sequence
from pathlib import Path

import numpy as np

from murmesh.plugin.describe import CONVENTION, origin, plain
from murmesh.plugin.files import written
from murmesh.solver.result import Result


def write_table(
    result: Result, path: Path, remarks: Sequence[str], columns: Sequence[str], rows: Iterable[Sequence[str]]
) -> Path:
    """Write lines that begin with '#' (conventions, origin, remarks), then the names of the columns, then the rows."""
    with written(path) as scratch, scratch.open("w", newline="", encoding="utf-8") as stream:
        for remark in (origin(result), CONVENTION, *remarks):
            stream.write(f"# {plain(remark)}\n")
        table = csv.writer(stream, lineterminator="\n")
        table.writerow(columns)
        table.writerows(rows)
    return Path(path)


def decibels(value: float) -> str:
    """A level or a change of level; empty where there is none."""
    return f"{value:.2f}" if np.isfinite(value) else ""


def quantity(value: float) -> str:
    """A pressure or a mean square."""
    return f"{value:.8g}"


def chosen(result: Result, receivers: Sequence[str] = (), load_case: str = "") -> list[tuple[str, str]]:
    """(load case, receiver) pairs: those named, all where none is. Raises ResultError for an unknown name."""
    for name in receivers:
        result.receiver(name)
    cases = [result.load_case(load_case).name] if load_case else [held.name for held in result.load_cases]
    listed = tuple(receivers) or tuple(receiver.name for receiver in result.case.receivers)
    return [(case, receiver) for case in cases for receiver in listed]
