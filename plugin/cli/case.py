"""murmesh case: write the neutral HDF5 case."""

from __future__ import annotations

import argparse
from pathlib import Path

from murmesh.plugin.check import check, render
from murmesh.plugin.cli.command import DONE, FINDINGS, Command, answer, register, say
from murmesh.plugin.load import load_job
from murmesh.plugin.model import build_case
from murmesh.solver.case.hdf5 import write_case


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("model", help="job file (.toml), or a .msh that carries its job")
    parser.add_argument("case", nargs="?", help="case file to write (default: MODEL.h5)")


def run(args: argparse.Namespace) -> int:
    job, mesh = load_job(args.model)
    found = check(job, mesh)
    if found:
        say(render(found))
    if any(finding.severity == "error" for finding in found):
        return FINDINGS
    target = Path(args.case) if args.case else Path(args.model).with_suffix(".h5")
    write_case(build_case(job, mesh), target)
    answer(str(target))
    return DONE


register(
    Command(
        "case",
        "Write the neutral HDF5 case of a job; nothing is written if the check finds errors (exit status 1).",
        "  murmesh case cab.toml cab.h5",
        arguments,
        run,
    )
)
