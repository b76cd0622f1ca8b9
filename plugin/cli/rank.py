"""murmesh rank: which panel is heard."""

from __future__ import annotations

import argparse

from murmesh.plugin.cli.command import DONE, Command, answer, answer_json, band_argument, register, table
from murmesh.plugin.describe import level_unit, plain
from murmesh.plugin.export.ranking_json import ranking_tree
from murmesh.plugin.summary import CAUTIONS, shown
from murmesh.solver.contribution import Ranking, rank
from murmesh.solver.result import read_result


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("result", help="result file")
    words = "receiver; repeat for a sum over several (default: all); or 'radiated power'"
    parser.add_argument("--receiver", action="append", default=[], help=words)
    parser.add_argument("--band", type=band_argument, help="LOWER:UPPER in Hz (default: the whole sweep)")
    parser.add_argument("--weighting", choices=("A", "C", "Z"), default="A", help="frequency weighting (default A)")
    parser.add_argument("--load-case", default="", help="load case (default: the first)")
    parser.add_argument("--json", action="store_true", help="print JSON")


def run(args: argparse.Namespace) -> int:
    ranking = rank(read_result(args.result), args.receiver, args.band, args.weighting, args.load_case)
    if args.json:
        answer_json(ranking_tree(ranking))
    else:
        answer(text(ranking))
    return DONE


def text(ranking: Ranking) -> str:
    """The ranking as a table, with what it means and what it does not."""
    unit = f"dB({ranking.weighting})" if ranking.weighting != "Z" else "dB"
    where, mean = ("in", "") if ranking.power else ("at", "mean ")
    head = (
        f"Participation {where} {', '.join(ranking.receivers)}: {ranking.band[0]:g} .. {ranking.band[1]:g} Hz, load case "
        f"'{ranking.load_case}', {mean}level {shown(ranking.total_db)} "
        f"{plain(level_unit(ranking.weighting, power=ranking.power))}"
    )
    rows = [(row.panel, f"{100 * row.share:+.1f} %", shown(row.own_db), f"{row.removal_db:+.1f}") for row in ranking.rows]
    body = table(("panel", f"share of {ranking.what}", f"alone [{unit}]", "if silent [dB]"), rows)
    total = sum(row.share for row in ranking.rows)
    remarks = [f"Shares add up to {100 * total:.6f} % (closure {ranking.closure:.0e}).", ranking.words]
    return "\n".join([head, body, *remarks, *([CAUTIONS] if ranking.power else [])])


register(
    Command(
        "rank",
        "Rank the panels by what quietening them would do (not by what treating them would).",
        "  murmesh rank cab_result.h5 --receiver left_ear --band 80:160",
        arguments,
        run,
    )
)
