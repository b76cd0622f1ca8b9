"""One table of what murmesh costs, against targets and peers measured in the same run.

    python tests/benchmarks/run.py [--only NAME ...] [--quick] [--json FILE]

Every other file of this folder is a benchmark; see DEVELOPERS.md, "Benchmarks".
"""

from __future__ import annotations

import argparse
import importlib
import json
import math
import sys
from dataclasses import asdict
from pathlib import Path

HERE = Path(__file__).resolve().parent
sys.path[:0] = [str(HERE), str(HERE.parent)]

from bench import BENCHMARKS, Row  # noqa: E402 - found through the line above

HEAD = f"{'name':<52} {'value':>10} {'unit':<9} {'target':>8} {'met':<4} compared with"
NAMES = sorted(path.stem for path in HERE.glob("*.py") if f'@benchmark("{path.stem}")' in path.read_text("utf-8"))


def main(arguments: list[str] | None = None) -> int:
    parser = argparse.ArgumentParser(description="Run the benchmarks and print one table.")
    parser.add_argument("--only", nargs="+", choices=NAMES, default=NAMES, metavar="NAME", help=f"of {', '.join(NAMES)}")
    parser.add_argument("--quick", action="store_true", help="smaller cases, in a minute or two; its ratios are rough")
    parser.add_argument("--json", type=Path, metavar="FILE", help="write the rows to FILE")
    args = parser.parse_args(arguments)
    print(HEAD)
    rows = []
    for name in args.only:
        importlib.import_module(name)
        for row in BENCHMARKS[name](args.quick):
            rows.append({"benchmark": name, **asdict(row), "met": row.met})
            print(line(row), flush=True)
            if args.json:  # after every row: what is done stays when a later one is interrupted
                args.json.write_text(json.dumps(rows, indent=1).replace("NaN", "null") + "\n", encoding="utf-8")
    return 0


def line(row: Row) -> str:
    """A row as it is printed."""
    value = "-" if math.isnan(row.value) else f"{row.value:.3g}" if abs(row.value) < 1000 else f"{row.value:.0f}"
    target = "" if row.target is None else f"{'>=' if row.at_least else '<='} {row.target:g}"
    met = {True: "yes", False: "NO", None: ""}[row.met]
    return f"{row.name:<52} {value:>10} {row.unit:<9} {target:>8} {met:<4} {row.compared_with}"


if __name__ == "__main__":
    sys.exit(main())
