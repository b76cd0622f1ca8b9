"""murmesh report: the page for a design review."""

from __future__ import annotations

import argparse
from pathlib import Path

from murmesh.plugin.cli.command import CANNOT, DONE, Command, answer, register, say
from murmesh.plugin.probe import rendering_missing
from murmesh.plugin.report.page import write_page
from murmesh.plugin.report.review import Review
from murmesh.plugin.report.treatments import read_study
from murmesh.solver.result import read_result


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("result", help="result file")
    parser.add_argument("page", help="page to write, .html")
    parser.add_argument("--target", type=float, help="overall level wanted at every receiver [dB(A)]")
    parser.add_argument("--question", default="", help="the question the review answers (default: from the case)")
    parser.add_argument("--load-case", default="", help="load case of the maps (default: the first)")
    parser.add_argument("--study", help="study.json of `murmesh treat`: rankings of treatments and the verified choice")


def run(args: argparse.Namespace) -> int:
    review = Review(read_result(args.result), args.question, args.target, args.load_case)
    found = read_study(args.study, review.result) if args.study else None
    answer(str(write_page(review, Path(args.page), found)))
    missing = rendering_missing()
    if missing:
        say(f"murmesh: the maps of the surfaces are left out: {missing}")
    return CANNOT if missing else DONE


register(
    Command(
        "report",
        "Write the page for a design review: one HTML file with levels, rankings, maps, validity and cautions.",
        "  murmesh report cab_result.h5 review.html --target 78 --study treatment/study.json",
        arguments,
        run,
    )
)
