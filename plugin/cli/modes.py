"""murmesh modes: cavity modes of the undamped interior."""

from __future__ import annotations

import argparse

from murmesh.plugin.cli.command import DONE, Command, answer, answer_json, register, table
from murmesh.plugin.load import load_case_file
from murmesh.solver.modes import modes


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("case", help="case file, or a job file")
    parser.add_argument("--near", type=float, default=0.0, help="frequency [Hz] to look around (default: from 0 up)")
    parser.add_argument("--count", type=int, default=12, help="how many modes (default 12)")
    parser.add_argument("--order", type=int, default=0, help="polynomial order (default: chosen)")
    parser.add_argument("--draw", metavar="FOLDER", help="draw the shapes into this folder")
    parser.add_argument("--json", action="store_true", help="print JSON")


def run(args: argparse.Namespace) -> int:
    case = load_case_file(args.case)
    found = modes(case, args.count, args.near, args.order)
    if args.json:
        answer_json({"frequencies_hz": [round(float(f), 4) for f in found.frequencies]})
    else:
        rows = [(str(i + 1), f"{f:.2f}") for i, f in enumerate(found.frequencies)]
        answer(table(("mode", "frequency [Hz]"), rows))
        answer("Hard walls, no losses; 0 Hz is the uniform pressure.")
    if args.draw:
        from murmesh.plugin.pictures.mode_shape import draw_all

        for path in draw_all(found, args.draw):
            answer(str(path))
    return DONE


register(
    Command(
        "modes",
        "Find the cavity modes of the undamped interior nearest to a frequency.",
        "  murmesh modes cab.h5 --near 95 --count 6",
        arguments,
        run,
    )
)
