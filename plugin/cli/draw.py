"""murmesh draw: pictures of a result."""

from __future__ import annotations

import argparse
from pathlib import Path

from murmesh.plugin.cli.command import CANNOT, DONE, Command, answer, product_arguments, product_options, register, say
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.probe import rendering_missing
from murmesh.plugin.products import OUTSIDE, Product
from murmesh.solver.result import Result, read_result


def arguments(parser: argparse.ArgumentParser) -> None:
    known = ", ".join(product.name for product in PICTURES if product.source in ("result", OUTSIDE))
    product_arguments(parser, "folder for the PNG files")
    parser.add_argument("--picture", action="append", default=[], help=f"one of: {known}; repeat for several (default: all)")


def run(args: argparse.Namespace) -> int:
    result = read_result(args.result)
    pictures = [PICTURES[name] for name in args.picture] or PICTURES.of(result)
    left_out = draw(result, Path(args.folder), pictures, **product_options(args))
    return CANNOT if left_out else DONE


def draw(result: Result, folder: Path, pictures: list[Product], prefix: str = "", **options: object) -> list[str]:
    """Draw into `folder`, answering with each path; returns the names of pictures that this machine cannot draw."""
    folder.mkdir(parents=True, exist_ok=True)
    missing = rendering_missing() if any(picture.renders for picture in pictures) else None
    left_out = [picture.name for picture in pictures if picture.renders and missing]
    for picture in pictures:
        if picture.name not in left_out:
            path = folder / f"{prefix}{picture.name}{picture.suffix}"
            answer(str(picture.make(result, path, **picture.taking(**options))))
    if missing:
        say(f"murmesh: left out {', '.join(left_out)}: {missing}")
    return left_out


register(
    Command(
        "draw",
        "Draw level maps, cut planes, spectra and rankings of a result as PNG files.",
        "  murmesh draw cab_result.h5 pictures --picture cut_plane --frequency 95",
        arguments,
        run,
    )
)
