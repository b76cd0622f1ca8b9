"""murmesh check: the tag check, on demand."""

from __future__ import annotations

import argparse
from pathlib import Path

from murmesh.plugin.check import Finding, as_json, check, check_case, render
from murmesh.plugin.cli.command import DONE, FINDINGS, Command, answer, register
from murmesh.plugin.load import load_job, model_arguments
from murmesh.solver.case.hdf5 import read_case


def arguments(parser: argparse.ArgumentParser) -> None:
    model_arguments(parser)
    parser.add_argument("--json", action="store_true", help="print JSON")


def run(args: argparse.Namespace) -> int:
    found = findings_of(args.model)
    answer(as_json(found) if args.json else render(found) or "no findings")
    return FINDINGS if any(finding.severity == "error" for finding in found) else DONE


def findings_of(model: str) -> tuple[Finding, ...]:
    """All findings of a case, a job file or a model that carries its job."""
    if Path(model).suffix in (".h5", ".hdf5"):
        return check_case(read_case(model))
    return check(*load_job(model))


register(
    Command(
        "check",
        "Check groups, kinds, mesh and laws before solving; exit status 1 if there are errors.",
        "  murmesh check cab.toml",
        arguments,
        run,
    )
)
