"""murmesh levels: levels at the receivers."""

from __future__ import annotations

import argparse

import numpy as np

from murmesh.plugin.cli.command import DONE, Command, answer, answer_json, register, table
from murmesh.plugin.summary import CAUTIONS, PARTIAL, Bars, Levels, all_levels, shown, trust
from murmesh.solver.result import read_result


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("result", help="result file")
    parser.add_argument("--weighting", choices=("A", "C", "Z"), default="A", help="frequency weighting (default A)")
    parser.add_argument("--load-case", default="", help="one load case only")
    parser.add_argument("--json", action="store_true", help="print JSON")


def run(args: argparse.Namespace) -> int:
    result = read_result(args.result)
    found = all_levels(result, args.weighting, args.load_case)
    if args.json:
        answer_json([_tree(item) for item in found])
    else:
        answer("\n\n".join(part for part in (text(found), trust(result), CAUTIONS) if part))
    return DONE


def text(found: list[Levels]) -> str:
    """Tables of third-octave levels, one per load case, a column per receiver."""
    parts = []
    for name in dict.fromkeys(item.load_case for item in found):
        group = [item for item in found if item.load_case == name]
        rows = [("overall", *(shown(item.overall, item.bars.overall if item.bars else np.nan) for item in group))]
        for i, band in enumerate(group[0].bands):
            partial = group[0].spectrum == "density" and group[0].coverage[i] < PARTIAL
            cells = (shown(g.band_levels[i], g.bars.bands[i] if g.bars else np.nan) for g in group)
            rows.append((f"{band.nominal} Hz{' (partial)' if partial else ''}", *cells))
        title = f"{group[0].unit}, load case '{name}' ({group[0].spectrum}), third octaves"
        parts.append(f"{title}\n{table(('band', *(g.heading for g in group)), rows)}")
    return "\n\n".join(parts)


def _tree(item: Levels) -> dict[str, object]:
    def number(value: float) -> float | None:
        return round(float(value), 3) if np.isfinite(value) else None

    none = np.full(len(item.bands), np.nan)
    bars = item.bars or Bars(np.nan, none, np.nan, none)
    return {
        "receiver": item.receiver,
        "load_case": item.load_case,
        "unit": item.unit,
        "overall": number(item.overall),
        "mesh_bar": number(bars.overall),
        "corrected": number(bars.corrected_overall),
        "third_octaves": [
            {
                "band_hz": float(band.nominal),
                "level": number(item.band_levels[i]),
                "mesh_bar": number(bars.bands[i]),
                "corrected": number(bars.corrected_bands[i]),
                "covered": round(float(item.coverage[i]), 3),
            }
            for i, band in enumerate(item.bands)
        ],
    }


register(
    Command(
        "levels",
        "Print overall and third-octave levels at every receiver.",
        "  murmesh levels cab_result.h5 --weighting A",
        arguments,
        run,
    )
)
