"""Files that are never half written: a temporary name in the same folder, then a rename."""

from __future__ import annotations

import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from murmesh.solver.errors import ResultError


@contextmanager
def written(path: str | Path) -> Iterator[Path]:
    """A scratch path with the same name and suffix; it replaces `path` when the block ends well.

    What the writer puts beside it (a folder of parts) goes along, file by file: nothing else in an existing folder is
    touched. Raises ResultError if the folder of `path` does not exist.
    """
    path = Path(path)
    if not path.parent.is_dir():
        raise ResultError(f"cannot write '{path}': the folder '{path.parent}' does not exist; make it first")
    scratch = Path(tempfile.mkdtemp(prefix=f".{path.name}.", suffix=".part", dir=path.parent))
    try:
        yield scratch / path.name
        for part in sorted(scratch.iterdir(), key=lambda item: item.is_file()):
            _move(part, path.parent / part.name)
    finally:
        shutil.rmtree(scratch, ignore_errors=True)


def _move(part: Path, target: Path) -> None:
    if not part.is_dir():
        part.replace(target)
        return
    target.mkdir(exist_ok=True)
    for item in part.iterdir():
        _move(item, target / item.name)
