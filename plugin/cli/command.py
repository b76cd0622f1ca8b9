"""What a subcommand is: a name, a line of help, an example, its arguments and `run(args) -> exit status`."""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from murmesh.solver.sweep import Progress

DONE, FINDINGS, CANNOT = 0, 1, 2


@dataclass(frozen=True)
class Command:
    """One subcommand."""

    name: str
    summary: str
    example: str
    arguments: Callable[[argparse.ArgumentParser], None]
    run: Callable[[argparse.Namespace], int]


COMMANDS: dict[str, Command] = {}


def register(command: Command) -> Command:
    """Enter a subcommand; its file does so when it is imported."""
    COMMANDS[command.name] = command
    return command


def answer(text: str) -> None:
    """The answer, on standard output."""
    sys.stdout.write(f"{text}\n")


def answer_json(tree: Any) -> None:
    """The answer for a script."""
    answer(json.dumps(tree, indent=1))


def say(text: str) -> None:
    """Progress and remarks, on standard error."""
    sys.stderr.write(f"{text}\n")
    sys.stderr.flush()


def show(progress: Progress) -> None:
    """Progress of a sweep; one rewritten line on a terminal; elsewhere a line per tenth, and per step of a reduced model."""
    text, last = f"  {progress.words}", progress.done == progress.total
    if sys.stderr.isatty():
        sys.stderr.write(f"\r{text:<70}" + ("\n" if last else ""))
    elif last or progress.certificate or progress.done % max(progress.total // 10, 1) == 0:
        sys.stderr.write(f"{text}\n")
    sys.stderr.flush()


def table(header: tuple[str, ...], rows: Sequence[tuple[str, ...]]) -> str:
    """Columns as wide as they need; the first to the left, the others to the right."""
    lines = [header, *rows]
    widths = [max(len(line[i]) for line in lines) for i in range(len(header))]
    shown = ["  ".join(c.ljust(w) if i == 0 else c.rjust(w) for i, (c, w) in enumerate(zip(line, widths, strict=True)))
             for line in lines]  # fmt: skip
    return "\n".join([shown[0], "-" * len(shown[0]), *shown[1:]])


def band_argument(text: str) -> tuple[float, float]:
    """A band given as LOWER:UPPER in hertz."""
    try:
        low, high = (float(part) for part in text.split(":"))
    except ValueError:
        raise argparse.ArgumentTypeError(f"'{text}' is not a band; give LOWER:UPPER in Hz, e.g. 80:160") from None
    return low, high


def product_arguments(parser: argparse.ArgumentParser, folder: str) -> None:
    """The arguments that drawing and exporting share; what a picture or format does not take is left aside."""
    parser.add_argument("result", help="result file")
    parser.add_argument("folder", help=folder)
    parser.add_argument("--frequency", type=float, help="frequency [Hz] of maps and fields (default: the loudest kept line)")
    parser.add_argument("--band", type=band_argument, help="LOWER:UPPER in Hz for rankings (default: the whole sweep)")
    parser.add_argument(
        "--receiver",
        action="append",
        help="receiver, or in rankings 'radiated power' or 'radiated power through SURFACE'; repeat for several (all)",
    )
    parser.add_argument("--weighting", choices=("A", "C", "Z"), help="frequency weighting (default A)")
    parser.add_argument("--load-case", help="load case (default: the first; tables: all)")


def product_options(args: argparse.Namespace) -> dict[str, Any]:
    """The keyword options that `product_arguments` stands for."""
    return {
        "frequency": args.frequency,
        "band": args.band,
        "receivers": tuple(args.receiver) if args.receiver else None,
        "weighting": args.weighting,
        "load_case": args.load_case,
    }


def result_path(case: Path) -> Path:
    """Where the result of a case goes unless said otherwise."""
    return case.with_name(f"{case.stem}_result.h5")
