"""murmesh kinds: what may be said of a surface, a load, a medium."""

from __future__ import annotations

import argparse

from murmesh.plugin.cli.command import DONE, Command, answer, register
from murmesh.plugin.manual import FAMILIES, table_of_kinds
from murmesh.solver.errors import CaseError, nearest


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("family", nargs="?", default="", help=f"one of: {', '.join(FAMILIES)} (default: all)")


def run(args: argparse.Namespace) -> int:
    if args.family and args.family not in FAMILIES:
        raise CaseError(f"no family is called '{args.family}'; {nearest(args.family, FAMILIES)}")
    answer(table_of_kinds(args.family))
    return DONE


register(
    Command(
        "kinds",
        "List every boundary kind, load, law and medium with its fields and units.",
        "  murmesh kinds 'boundary kinds'",
        arguments,
        run,
    )
)
