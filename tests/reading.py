"""Read the published values in tests/references; each file's header cites its source."""

from __future__ import annotations

import csv
import json
from pathlib import Path
from typing import Any

import numpy as np

FOLDER = Path(__file__).parent / "references"


def read_csv_reference(name: str) -> dict[str, Any]:
    """Columns by name: arrays of numbers, or of text where a column holds any."""
    lines = [line for line in (FOLDER / name).read_text().splitlines() if line.strip() and not line.startswith("#")]
    rows = list(csv.DictReader(lines))
    return {key: _column([row[key] for row in rows]) for key in rows[0]}


def _column(values: list[str]) -> Any:
    try:
        return np.array([float(value) for value in values])
    except (TypeError, ValueError):
        return np.array(values)


def read_json_reference(name: str) -> Any:
    """The content of a JSON reference."""
    return json.loads((FOLDER / name).read_text())
