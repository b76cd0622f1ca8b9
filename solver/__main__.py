"""Solve a case where only the solving room is installed: python -m murmesh.solver case.h5 [result.h5]."""

from __future__ import annotations

import sys
from pathlib import Path

from murmesh.solver.case.hdf5 import read_case
from murmesh.solver.errors import MurmeshError
from murmesh.solver.result import write_result
from murmesh.solver.sweep import Journal, Progress, solve

HELP = """usage: python -m murmesh.solver CASE.h5 [RESULT.h5]

Solves every line of the case's sweep and writes the result beside it (or to RESULT.h5).
Interrupted, it goes on where it stopped when called again.

example: python -m murmesh.solver cab.h5 cab_result.h5
"""


def show(progress: Progress) -> None:
    """One line on standard error, rewritten as lines are done."""
    sys.stderr.write(f"\r{progress.words}   ")
    if progress.done == progress.total:
        sys.stderr.write("\n")
    sys.stderr.flush()


def main(arguments: list[str]) -> int:
    """Exit status 0 (done), 2 (cannot) or 130 (interrupted)."""
    if len(arguments) not in (1, 2) or arguments[0] in ("-h", "--help"):
        sys.stdout.write(HELP)
        return 0 if arguments and arguments[0] in ("-h", "--help") else 2
    source = Path(arguments[0])
    target = Path(arguments[1]) if len(arguments) == 2 else source.with_name(f"{source.stem}_result.h5")
    journal = Journal.at(target)
    try:
        write_result(solve(read_case(source), journal, report=show), target)
    except MurmeshError as error:
        sys.stderr.write(f"\n{error}\n")
        return 2
    except KeyboardInterrupt:
        sys.stderr.write(f"\ninterrupted; finished lines are kept in {journal}: the same command goes on from there\n")
        return 130
    Journal(journal).forget()
    sys.stdout.write(f"{target}\n")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
