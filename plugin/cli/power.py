"""murmesh power: the power balance."""

from __future__ import annotations

import argparse

from murmesh.plugin.balance import MEANING, Balance, balance
from murmesh.plugin.cli.command import DONE, Command, answer, answer_json, band_argument, register, table
from murmesh.solver.levels import power_level
from murmesh.solver.result import read_result


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("result", help="result file")
    parser.add_argument("--band", type=band_argument, help="LOWER:UPPER in Hz (default: the whole sweep)")
    parser.add_argument("--load-case", default="", help="load case (default: the first)")
    parser.add_argument("--json", action="store_true", help="print JSON")


def run(args: argparse.Namespace) -> int:
    found = balance(read_result(args.result), args.band, args.load_case)
    if args.json:
        answer_json({"load_case": found.load_case, "put_in_w": found.supplied, "taken_w": found.taken})
    else:
        answer(text(found))
    return DONE


def text(found: Balance) -> str:
    """Both sides of the balance, largest first, and what is left over."""
    rows = [(name, f"{w:.3e}", _level(w), _share(w, found.total)) for name, w in found.rows]
    body = table(("put in (+), taken (-)", "power [W]", "level [dB re 1 pW]", "of the input"), rows)
    head = f"Power balance, load case '{found.load_case}'"
    return f"{head}\n{body}\nImbalance: {found.imbalance:.0e} of the input.\n{MEANING}"


def _level(power: float) -> str:
    return f"{float(power_level(power)):.1f}" if power > 0 else "-"


def _share(power: float, total: float) -> str:
    return f"{100 * power / total:+.1f} %" if total else "-"


register(
    Command(
        "power",
        "Print the power balance: what each load puts in, what each surface and volume takes.",
        "  murmesh power cab_result.h5 --band 80:160",
        arguments,
        run,
    )
)
