"""murmesh animate: the phase as GIF or MP4."""

from __future__ import annotations

import argparse
from pathlib import Path

from murmesh.plugin.cli.command import DONE, Command, answer, register
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.film import FRAMES
from murmesh.solver.result import read_result

WHERE = {"cuts": "cut_phase", "surfaces": "surface_phase"}


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("result", help="result file")
    parser.add_argument("file", help="animation to write, .gif or .mp4")
    parser.add_argument("--on", choices=tuple(WHERE), default="cuts", help="cut planes (default) or surfaces")
    parser.add_argument("--frequency", type=float, help="frequency [Hz] (default: the loudest kept line)")
    parser.add_argument("--load-case", default="", help="load case (default: the first)")
    parser.add_argument("--limit", type=float, help="colours reach from -LIMIT to LIMIT [Pa] (default: from the field)")
    parser.add_argument("--frames", type=int, default=FRAMES, help=f"pictures per period (default {FRAMES})")


def run(args: argparse.Namespace) -> int:
    make = PICTURES[WHERE[args.on]].make
    options = {"frequency": args.frequency, "load_case": args.load_case, "limit": args.limit, "frames": args.frames}
    answer(str(make(read_result(args.result), Path(args.file), **options)))
    return DONE


register(
    Command(
        "animate",
        "Animate one period of the sound pressure on cut planes or surfaces, as GIF or MP4.",
        "  murmesh animate cab_result.h5 phase_95.gif --frequency 95 --on surfaces",
        arguments,
        run,
    )
)
