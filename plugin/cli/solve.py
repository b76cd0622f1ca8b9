"""murmesh solve: solve a case over its sweep."""

from __future__ import annotations

import argparse
from pathlib import Path

import numpy as np

from murmesh.plugin.cli.command import CANNOT, DONE, Command, answer, register, result_path, say, show
from murmesh.plugin.load import load_case_file
from murmesh.solver.orders import orders_text
from murmesh.solver.result import Result, write_result
from murmesh.solver.sweep import Journal, solve


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("case", help="case file (.h5), job file (.toml), or a .msh that carries its job")
    parser.add_argument("result", nargs="?", help="result file (default: CASE_result.h5)")
    parser.add_argument("--order", type=int, default=0, help="polynomial order 1..8 (default: chosen)")
    parser.add_argument(
        "--method",
        choices=("auto", "reduced", "direct"),
        default="",
        help="reduced: a certified model of all lines; direct: every line by itself (default: the sweep's)",
    )
    parser.add_argument("--solver", choices=("default", "rslab", "superlu"), default="default", help="linear solver")
    parser.add_argument("--force", action="store_true", help="solve although the check finds errors")


def run(args: argparse.Namespace) -> int:
    from murmesh.plugin.check import check_case, render

    case = load_case_file(args.case)
    findings = check_case(case)
    if findings:
        say(render(findings))
    if any(finding.severity == "error" for finding in findings) and not args.force:
        say("murmesh: not solved; cure the errors above, or solve with --force")
        return CANNOT
    target = Path(args.result) if args.result else result_path(Path(args.case))
    journal = Journal.at(target)
    result = solve(case, journal, report=show, order=args.order, solver=args.solver, method=args.method)
    write_result(result, target)
    Journal(journal).forget()
    say(summary(result))
    answer(str(target))
    return DONE


def summary(result: Result) -> str:
    """What the solver can say about its own numbers."""
    unknowns, linear_solver = int(result.provenance["unknowns"]), result.provenance["linear_solver"]
    parts = [f"{orders_text(result.orders)}, {unknowns:,} unknowns, {linear_solver}"]
    if result.mesh_error_db is not None:
        parts.append(
            f"mesh error at the receivers {result.mesh_error_db:.2g} dB rms (wanted {result.case.sweep.accuracy:g} dB)"
        )
    if "orders_raised" in result.provenance:
        parts.append(f"orders raised {result.provenance['orders_raised']}")
    parts += [result.certificate.words] if result.certificate is not None else []
    for held in result.load_cases:
        imbalance = float(abs(result.imbalance(held.name)).max())
        parts.append(
            f"load case '{held.name}': worst residual {np.nanmax(held.residual):.0e}, power imbalance {imbalance:.0e}, "
            f"contributions against the field {held.closure.max(initial=0):.0e}"
        )
    return "\n".join(parts)


register(
    Command(
        "solve",
        "Solve a case on every line of its sweep; interrupted, the same command goes on where it stopped.",
        "  murmesh solve cab.toml cab_result.h5",
        arguments,
        run,
    )
)
