"""murmesh treat: which trim part to treat, with what, for how many dB."""

from __future__ import annotations

import argparse
import sys
from contextlib import redirect_stdout
from dataclasses import replace
from pathlib import Path
from typing import Any

from murmesh.plugin.check import check_catalogue, render
from murmesh.plugin.cli.command import (
    CANNOT,
    DONE,
    Command,
    answer,
    answer_json,
    band_argument,
    register,
    result_path,
    say,
    table,
)
from murmesh.plugin.cli.draw import draw
from murmesh.plugin.export import EXPORTS
from murmesh.plugin.load import load_case_file
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.study import QUIETER, VERIFIED, Measure, Study, study, tree, untreated, write_study
from murmesh.plugin.summary import CAUTIONS
from murmesh.solver.case.model import Case
from murmesh.solver.errors import ResultError
from murmesh.solver.result import Result, read_result
from murmesh.solver.treatment import Goal

SAMPLES = 100
"""Draws for the spread of gains, unless said otherwise."""


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "result", help="result file with a reduced model; or a solved job, whose catalogue and limits count as they are now"
    )
    parser.add_argument("folder", nargs="?", help="folder for the tables and pictures")
    parser.add_argument("--receiver", action="append", default=[], help="receiver; repeat for several (default: all)")
    parser.add_argument("--band", type=band_argument, help="LOWER:UPPER in Hz (default: the whole sweep)")
    parser.add_argument("--weighting", choices=("A", "C", "Z"), default="A", help="frequency weighting (default A)")
    parser.add_argument("--load-case", default="", help="load case (default: the first)")
    parser.add_argument("--mass", type=float, help="largest added mass [kg] (default: the case's limit)")
    parser.add_argument("--cost", type=float, help="largest cost [EUR] (default: the case's limit)")
    parser.add_argument("--panels", type=int, help="largest number of treated panels")
    parser.add_argument("--thickness", type=float, help="largest thickness [m]")
    parser.add_argument("--wanted-gain", type=float, help="gain [dB] that is enough: the least cost that reaches it")
    parser.add_argument("--exclude", action="append", default=[], help="panel (or glob) that stays as it is; repeat for more")
    parser.add_argument("--force", action="append", default=[], help="panel that must be treated; repeat for more")
    words = f"draws of what is not known, for the spread of gains (default {SAMPLES}; 0: none)"
    parser.add_argument("--samples", type=int, default=SAMPLES, help=words)
    parser.add_argument("--unverified", action="store_true", help="do not solve the best choices again in full")
    parser.add_argument("--json", action="store_true", help="print JSON")


def run(args: argparse.Namespace) -> int:
    result = result_of(Path(args.result))
    if not _sound(result.case):
        return CANNOT
    goal = Goal(tuple(args.receiver), args.load_case, args.band, args.weighting)
    given = {
        key: value
        for key in ("mass", "cost", "panels", "thickness", "wanted_gain")
        if (value := getattr(args, key)) is not None
    }
    given |= {key: tuple(value) for key in ("exclude", "force") if (value := getattr(args, key))}
    found = study(
        result, goal, result.case.limits.with_(**given), verify=not args.unverified, samples=args.samples, report=_told
    )
    if args.json:
        answer_json(tree(found))
    else:
        answer(f"{text(found)}\n\n{CAUTIONS}")
    if not args.folder:
        return DONE
    with redirect_stdout(sys.stderr if args.json else sys.stdout):  # JSON stands alone
        return products(found, Path(args.folder))


def _sound(case: Case) -> bool:
    """Whether the laws of the catalogue can be believed; what is doubtful is said."""
    findings = check_catalogue(case)
    if findings:
        say(render(findings))
    refused = any(finding.severity == "error" for finding in findings)
    if refused:
        say("murmesh: nothing computed; cure the errors of the catalogue above")
    return not refused


def result_of(path: Path) -> Result:
    """A result; of a job (.toml, .msh) the result beside it, with catalogue, limits and ranges as the job has them now.

    Raises: ResultError where the job is not solved yet, or has changed otherwise since.
    """
    if path.suffix == ".h5":
        return read_result(path)
    case, target = load_case_file(path), result_path(path)
    if not target.is_file():
        raise ResultError(f"'{path}' is not solved yet: there is no '{target}'; run murmesh solve {path} first")
    result = read_result(target)
    if untreated(case).checksum != untreated(result.case).checksum:
        raise ResultError(f"'{path}' has changed since '{target}' was solved, in more than its treatments; solve it again")
    return replace(result, case=case)


def _told(words: str) -> None:
    say(f"  {words}")


def products(found: Study, folder: Path) -> int:
    """Every table and picture of a study, into a folder."""
    folder.mkdir(parents=True, exist_ok=True)
    answer(str(write_study(found, folder / "study.json")))
    for product in EXPORTS:
        if product.source == "study":
            answer(str(product.make(found, folder / product.file_name)))
    pictures = [picture for picture in PICTURES if picture.source == "study"]
    left_out = draw(found, folder, pictures)  # type: ignore[arg-type]
    return CANNOT if left_out else DONE


def text(found: Study) -> str:
    """Both rankings, the choice and its verification."""
    goal = found.goal
    unit = f"dB({goal.weighting})" if goal.weighting != "Z" else "dB"
    where = ", ".join(goal.receivers) or "all receivers"
    head = f"Baseline {found.level:.1f} {unit} re 20 uPa, mean over {where}, load case '{_load_case(found)}'"
    quiet = [(m.panel, _gain(m.gain), *_drawn(m), m.caution) for m in found.quieten]
    drawn = ("80 % of draws", "place") if found.spread else ()
    treat = [
        (m.name, _gain(m.gain), *_drawn(m), f"{m.mass:.2f}", f"{m.cost:.1f}", _per(m.gain, m.mass), _per(m.gain, m.cost, 3),
         m.caution)
        for m in found.treat
    ]  # fmt: skip
    parts = [
        head,
        f"QUIETEN: the panel's velocity lowered by {QUIETER:g} dB, nothing else changed\n"
        + table(("panel", f"gain [{unit}]", *drawn, "caution"), quiet),
        "TREAT: each treatment of the catalogue where it may go\n"
        + table(("measure", f"gain [{unit}]", *drawn, "kg", "EUR", "dB/kg", "dB/EUR", "caution"), treat),
        _choices(found, unit),
        _spread(found, unit),
        found.words,
    ]
    return "\n\n".join(part for part in parts if part)


def _drawn(measure: Measure) -> tuple[str, ...]:
    """Gains and places of the middle 80 % of the draws."""
    if measure.spread is None or measure.places is None:
        return ()
    low, high = measure.places
    return f"{_gain(measure.spread[0])} .. {_gain(measure.spread[1])}", f"{low}" if low == high else f"{low}-{high}"


def _spread(found: Study, unit: str) -> str:
    """What the ranges of the case do to the baseline, the gains and the order of the best."""
    if found.spread is None:
        return ""
    low, high = found.spread.level_band
    ranges = found.result.case.ranges
    lines = [
        f"SPREAD over {len(found.spread.gains)} draws: residual damping x/÷ {ranges.damping:g}, flow resistivity x/÷ "
        f"{ranges.flow_resistivity:g}, thickness x/÷ {ranges.thickness:g}, velocity ± {ranges.velocity:g} dB, phase ± "
        f"{ranges.phase:g}°",
        f"baseline {low:.1f} .. {high:.1f} {unit} (middle 80 %)",
    ]
    for number, candidate in enumerate(found.choice.candidates[:VERIFIED]):
        band = found.band(number)
        if band:
            names = " + ".join(option.name for option in found.used(candidate)) or "nothing"
            lines.append(f"gain {band[0]:+.2f} .. {band[1]:+.2f} {unit}: {names}")
    lines.append(f"the choice stays first of these in {100 * found.stays_first():.0f} % of the draws")
    return "\n".join(lines)


def _load_case(found: Study) -> str:
    return found.result.load_case(found.goal.load_case).name


def _choices(found: Study, unit: str) -> str:
    rows: list[tuple[str, ...]] = []
    for number, candidate in enumerate(found.choice.candidates[:5]):
        checked = f"{found.verified[number].gain:+.2f}" if number < len(found.verified) else "-"
        names = " + ".join(option.name for option in found.used(candidate)) or "nothing"
        rows.append((names, _gain(candidate.gain), checked, f"{candidate.mass:.2f}", f"{candidate.cost:.1f}"))
    body = table(("choice", f"predicted [{unit}]", "verified", "kg", "EUR"), rows)
    return f"CHOICE within {_limits(found)} ({found.choice.how})\n{body}"


def _limits(found: Study) -> str:
    limits: dict[str, Any] = {k: v for k, v in vars(found.limits).items() if v not in (None, ())}
    units = {"mass": "kg", "cost": "EUR", "panels": "panels", "thickness": "m", "wanted_gain": "dB wanted"}
    words = [f"{value:g} {units[key]}" if key in units else f"{key} {', '.join(value)}" for key, value in limits.items()]
    return ", ".join(words) or "no limits"


def _gain(value: float) -> str:
    return f"{value:+.2f}"


def _per(gain: float, amount: float, digits: int = 2) -> str:
    return f"{gain / amount:+.{digits}f}" if amount > 0 else "-"


register(
    Command(
        "treat",
        "Rank what quietening and what treating each panel would bring, and choose treatments within limits.",
        "  murmesh treat cab_result.h5 treatment --mass 6 --cost 90",
        arguments,
        run,
    )
)
