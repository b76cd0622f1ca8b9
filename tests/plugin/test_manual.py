"""The contributor guide tells the truth: its generated tables are those of today, its minimal case is read and solved."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from murmesh.plugin.manual import FAMILIES, RECORDS, table_of_kinds, with_layout
from murmesh.solver.case.hdf5 import read_case
from murmesh.solver.sweep import solve

GUIDE = Path(__file__).parents[2] / "DEVELOPERS.md"


def test_the_case_layout_is_that_of_today() -> None:
    text = GUIDE.read_text(encoding="utf-8")
    assert with_layout(text) == text, "run: python -m murmesh.plugin.manual DEVELOPERS.md"
    for path in RECORDS:
        assert f"`{path}`" in text
    for cls in FAMILIES.values():
        assert all(f"`{name}`" in text for name in cls.registry)


def test_the_minimal_case_is_read_and_solved(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    found = re.search(r"```python\n(# the least a case needs.*?)```", GUIDE.read_text(encoding="utf-8"), re.DOTALL)
    assert found
    monkeypatch.chdir(tmp_path)
    exec(compile(found.group(1), "DEVELOPERS.md", "exec"), {})
    result = solve(read_case(tmp_path / "least.h5"))
    assert result.mean_square("ear")[0] > 0


def test_every_module_is_on_the_map() -> None:
    text = GUIDE.read_text(encoding="utf-8")
    for room in ("solver", "plugin"):
        for path in (GUIDE.parent / room).glob("*.py"):
            if not path.name.startswith("__"):
                assert path.stem in text, f"{path} is not on the map of DEVELOPERS.md"


def test_one_family_can_be_listed() -> None:
    assert "BOUNDARY KINDS" in table_of_kinds("boundary kinds")
    assert "MEDIA" not in table_of_kinds("boundary kinds")
