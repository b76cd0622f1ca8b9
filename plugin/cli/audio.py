"""murmesh audio: receiver spectra to listen to."""

from __future__ import annotations

import argparse
from pathlib import Path

from murmesh.plugin.audio import LABEL, SECONDS, sounds, write_sounds
from murmesh.plugin.cli.command import DONE, Command, answer, register, say
from murmesh.solver.result import read_result


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("result", help="result file")
    parser.add_argument("after", nargs="?", help="a second result file: both are written with one gain")
    parser.add_argument("folder", help="folder for the WAV files")
    parser.add_argument("--receiver", action="append", default=[], help="receiver; repeat for several (default: all)")
    parser.add_argument("--load-case", default="", help="load case (default: the first)")
    parser.add_argument("--seconds", type=float, default=SECONDS, help=f"duration (default {SECONDS:g})")


def run(args: argparse.Namespace) -> int:
    names = ("before", "after") if args.after else ("sound",)
    results = [(name, read_result(path)) for name, path in zip(names, (args.result, args.after), strict=False)]
    for path in write_sounds(sounds(results, args.receiver, args.load_case, args.seconds), Path(args.folder)):
        answer(str(path))
    say(LABEL)
    return DONE


register(
    Command(
        "audio",
        "Write receiver spectra as WAV files, before and after with one gain, to hear a difference.",
        "  murmesh audio bare_result.h5 lined_result.h5 sounds --receiver left_ear",
        arguments,
        run,
    )
)
