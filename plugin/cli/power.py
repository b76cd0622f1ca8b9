"""murmesh power: the power balance."""

from __future__ import annotations

import argparse

import numpy as np
import numpy.typing as npt

from murmesh.plugin.cli.command import DONE, Command, answer, answer_json, band_argument, register, table
from murmesh.solver.errors import ResultError
from murmesh.solver.levels import power_level
from murmesh.solver.result import Result, read_result


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("result", help="result file")
    parser.add_argument("--band", type=band_argument, help="LOWER:UPPER in Hz (default: the whole sweep)")
    parser.add_argument("--load-case", default="", help="load case (default: the first)")
    parser.add_argument("--json", action="store_true", help="print JSON")


def run(args: argparse.Namespace) -> int:
    result = read_result(args.result)
    held = result.load_case(args.load_case)
    weights = _weights(result, args.band, args.load_case)
    supplied = dict(zip(held.loads, weights @ held.supplied, strict=True))
    taken = dict(zip(result.power_labels, weights @ held.absorbed, strict=True))
    if args.json:
        answer_json({"load_case": held.name, "put_in_w": supplied, "taken_w": taken})
    else:
        answer(text(held.name, supplied, taken))
    return DONE


def _weights(result: Result, band: tuple[float, float] | None, load_case: str) -> npt.NDArray[np.float64]:
    """How much each line counts: 1 for tones, its share of the frequency axis over the bandwidth for a density."""
    f, case = result.frequencies, result.load_case_of(load_case)
    low, high = band or (f[0], f[-1])
    inside = (f >= low) & (f <= high)
    if not inside.any():
        raise ResultError(f"no line lies between {low:g} and {high:g} Hz; choose another band")
    if case.spectrum == "tones" or inside.sum() == 1:
        return inside.astype(np.float64)
    edges = np.concatenate([[f[inside][0]], (f[inside][1:] + f[inside][:-1]) / 2, [f[inside][-1]]])
    weights = np.zeros(len(f))
    weights[inside] = np.diff(edges) / case.bandwidth
    return weights


def text(load_case: str, supplied: dict[str, float], taken: dict[str, float]) -> str:
    """Both sides of the balance, largest first, and what is left over."""
    total = sum(supplied.values())
    rows = [(f"+ {name}", f"{w:.3e}", _level(w), _share(w, total)) for name, w in _largest_first(supplied)]
    rows += [(f"- {name}", f"{w:.3e}", _level(w), _share(w, total)) for name, w in _largest_first(taken)]
    body = table(("put in (+), taken (-)", "power [W]", "level [dB re 1 pW]", "of the input"), rows)
    left = abs(total - sum(taken.values())) / abs(total) if total else 0.0
    return (
        f"Power balance, load case '{load_case}'\n{body}\nImbalance: {left:.0e} of the input.\n"
        "A negative input means that the others drive that load's surface; volumes take power by their losses."
    )


def _largest_first(powers: dict[str, float]) -> list[tuple[str, float]]:
    return sorted(powers.items(), key=lambda item: -item[1])


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
