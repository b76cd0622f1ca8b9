"""Everything murmesh raises on purpose.

    MurmeshError
    ├── CaseError            the case (or what it was written from) does not make sense
    │   ├── FieldError       one field: unknown, missing, out of bounds, of the wrong unit
    │   ├── FormatError      a file is truncated, foreign, of a newer version or inconsistent
    │   └── RangeError       a table is asked for a frequency it does not hold
    ├── MeshError            the mesh cannot carry the case
    ├── SolveError           the linear system cannot be solved, or does not fit in memory
    ├── ResultError          a result does not hold what is asked of it
    └── MissingLibraryError  a system library is not installed

Every message says what was given, what was expected and how to cure it.
A `ValidityWarning` marks a number that is still computed but lies outside what its source covers, a `FallbackWarning` one
that was computed in a slower way than usual.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class MurmeshError(Exception):
    """Base of every error raised on purpose; the command line prints it and exits with status 2."""


class CaseError(MurmeshError):
    """The case does not make sense."""


class FieldError(CaseError):
    """One field of the case is unknown, missing, out of bounds or of the wrong unit."""


class FormatError(CaseError):
    """A file is truncated, foreign, written by a newer version, or inconsistent."""


class RangeError(CaseError):
    """A table is asked for a frequency outside the ones it holds."""


class MeshError(MurmeshError):
    """The mesh cannot carry the case."""


class SolveError(MurmeshError):
    """The linear system cannot be solved, or does not fit in memory."""


class ResultError(MurmeshError):
    """A result does not hold what is asked of it."""


class MissingLibraryError(MurmeshError):
    """A system library is not installed."""


class ValidityWarning(UserWarning):
    """A number is computed outside the range its published source covers."""


class FallbackWarning(UserWarning):
    """A number is computed in another way than usual, because the usual one failed."""


def nearest(given: str, known: Iterable[str]) -> str:
    """The tail of a message about an unknown name: the nearest known one, and all of them."""
    names = sorted(known)
    match = difflib.get_close_matches(given, names, n=1, cutoff=0.4)
    hint = f"did you mean '{match[0]}'? " if match else ""
    return f"{hint}Known: {', '.join(names) if names else 'none'}."
