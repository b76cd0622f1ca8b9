"""murmesh compare: what changed from one run to the next."""

from __future__ import annotations

import argparse
from pathlib import Path

from murmesh.plugin.cli.command import DONE, Command, answer, answer_json, register, table
from murmesh.plugin.compare import Comparison, Pair, compare, comparison_tree, write_csv, write_json, write_losses
from murmesh.plugin.describe import plain
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.summary import shown
from murmesh.solver.result import read_result


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("before", help="result file")
    parser.add_argument("after", help="result file")
    parser.add_argument("folder", nargs="?", help="folder for tables and pictures (default: none are written)")
    parser.add_argument("--weighting", choices=("A", "C", "Z"), default="A", help="frequency weighting (default A)")
    parser.add_argument("--json", action="store_true", help="print JSON")


def run(args: argparse.Namespace) -> int:
    found = compare(read_result(args.before), read_result(args.after), args.weighting)
    if args.json:
        answer_json(comparison_tree(found))
    else:
        answer(text(found))
    if args.folder:
        _write(found, Path(args.folder))
    return DONE


def _write(found: Comparison, folder: Path) -> None:
    folder.mkdir(parents=True, exist_ok=True)
    write_csv(found, folder / "comparison.csv")
    write_json(found, folder / "comparison.json")
    PICTURES["comparison"].make(found, folder / "comparison.png")
    if any(pair.loss is not None for pair in found.pairs):
        write_losses(found, folder / "insertion_loss.csv")
        PICTURES["insertion_loss"].make(found, folder / "insertion_loss.png")


def text(found: Comparison) -> str:
    """What changed in the case, then a table per receiver and load case, then what to know."""
    return "\n\n".join([_changes(found), *(_levels(pair) for pair in found.pairs), plain("\n".join(found.remarks))])


def _changes(found: Comparison) -> str:
    if not found.changes:
        return "The two cases are the same."
    lines = [f"  {change.where}\n    before  {change.before}\n    after   {change.after}" for change in found.changes]
    return "\n".join(["Changed in the case:", *lines])


def _levels(pair: Pair) -> str:
    rows = [(name, shown(a), shown(b), f"{change:+.1f}" if change == change else "-") for name, a, b, change in pair.rows()]
    head = f"{pair.receiver}, load case '{pair.load_case}' ({pair.before.spectrum}), {pair.before.unit}"
    return f"{head}\n{table(('band', 'before', 'after', 'change [dB]'), rows)}"


register(
    Command(
        "compare",
        "Compare two results: what changed in the case, by how many dB at every receiver, and the insertion loss.",
        "  murmesh compare bare_result.h5 lined_result.h5 comparison",
        arguments,
        run,
    )
)
