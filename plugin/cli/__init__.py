"""The console command `murmesh`: one file per subcommand.

Exit status: 0 done, 1 findings (the tag check found errors), 2 cannot. Progress goes to standard error, the answer, and
nothing else, to standard output.
"""

from __future__ import annotations

import argparse
import importlib
import os
import pkgutil
import sys
import warnings

# Thousands of small dense solves: a second BLAS thread costs more than it gives, on a busy machine a hundred times more. The
# sparse solver has threads of its own. NumPy reads this when it is first imported.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

from murmesh.plugin.cli.command import COMMANDS, Command
from murmesh.solver.errors import FallbackWarning, MurmeshError, ValidityWarning


def main(arguments: list[str] | None = None) -> int:
    """Run one subcommand; every deliberate error becomes one message and exit status 2."""
    args = _parser().parse_args(arguments)
    command: Command = args.command
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for shown in (ValidityWarning, FallbackWarning):
            warnings.simplefilter("always", shown)
        warnings.showwarning = _show_warning
        try:
            return command.run(args)
        except MurmeshError as error:
            sys.stderr.write(f"\nmurmesh: {error}\n")
        except KeyboardInterrupt:
            sys.stderr.write("\nmurmesh: interrupted; finished lines are kept, the same command goes on from there\n")
            return 130
        except BrokenPipeError:
            return 0
    return 2


def _show_warning(message: Warning | str, *_: object, **__: object) -> None:
    sys.stderr.write(f"note: {message}\n")


def _parser() -> argparse.ArgumentParser:
    for module in pkgutil.iter_modules(__path__):
        importlib.import_module(f"{__name__}.{module.name}")
    parser = argparse.ArgumentParser(
        prog="murmesh",
        description="Acoustics for people who mesh in gmsh: which panel is heard, at what level, and what to do about it.",
        epilog="murmesh SUBCOMMAND --help shows an example of each.",
    )
    parser.add_argument("--version", action="version", version=_version())
    subparsers = parser.add_subparsers(title="subcommands", required=True, metavar="SUBCOMMAND")
    for command in COMMANDS.values():
        sub = subparsers.add_parser(
            command.name,
            help=command.summary,
            description=command.summary,
            epilog=f"example:\n{command.example}",
            formatter_class=argparse.RawDescriptionHelpFormatter,
        )
        command.arguments(sub)
        sub.set_defaults(command=command)
    return parser


def _version() -> str:
    from importlib.metadata import version

    return f"murmesh {version('murmesh')}"
