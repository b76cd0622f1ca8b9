"""murmesh export: fields and tables of a result for other programs."""

from __future__ import annotations

import argparse
from pathlib import Path

from murmesh.plugin.cli.command import DONE, Command, answer, product_arguments, product_options, register
from murmesh.plugin.export import EXPORTS
from murmesh.plugin.products import OUTSIDE, Product
from murmesh.solver.result import Result, read_result


def arguments(parser: argparse.ArgumentParser) -> None:
    known = ", ".join(product.name for product in EXPORTS if product.source in ("result", OUTSIDE))
    product_arguments(parser, "folder for the files")
    parser.add_argument("--format", action="append", default=[], help=f"one of: {known}; repeat for several (default: all)")


def run(args: argparse.Namespace) -> int:
    result = read_result(args.result)
    formats = [EXPORTS[name] for name in args.format] or EXPORTS.of(result)
    export(result, Path(args.folder), formats, **product_options(args))
    return DONE


def export(result: Result, folder: Path, formats: list[Product], **options: object) -> None:
    """Write every format into `folder`, answering with each path."""
    folder.mkdir(parents=True, exist_ok=True)
    for product in formats:
        path = product.make(result, folder / product.file_name, **product.taking(**options))
        answer(str(path))


register(
    Command(
        "export",
        "Write VTK fields, named panels, a temporal VTKHDF, CSV and JSON tables of a result.",
        "  murmesh export cab_result.h5 files --format vtu --frequency 95",
        arguments,
        run,
    )
)
