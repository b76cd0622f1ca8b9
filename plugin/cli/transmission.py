"""murmesh transmission: the transmission loss of a duct between two ports."""

from __future__ import annotations

import argparse
from pathlib import Path

import numpy as np

from murmesh.plugin.cli.command import DONE, Command, answer, answer_json, register, table
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.summary import CAUTIONS
from murmesh.plugin.transmission import REMARK, Transmission, write_csv
from murmesh.solver.result import read_result


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("result", help="result file; its load case is one incoming wave alone")
    parser.add_argument("folder", nargs="?", help="folder for transmission_loss.csv and .png (default: none are written)")
    parser.add_argument("--outlet", default="", help="port where the sound leaves (default: the only other one)")
    parser.add_argument("--load-case", default="", help="load case (default: the first)")
    parser.add_argument("--json", action="store_true", help="print JSON")


def run(args: argparse.Namespace) -> int:
    found = Transmission.of(read_result(args.result), args.outlet, args.load_case)
    if args.json:
        loss = [round(float(v), 3) if np.isfinite(v) else None for v in found.loss]
        head = {"inlet": found.inlet, "outlet": found.outlet, "first_cut_on_hz": round(found.cut_on, 1)}
        answer_json(head | {"frequencies_hz": found.result.frequencies.tolist(), "transmission_loss_db": loss})
    else:
        answer(text(found))
    if args.folder:
        folder = Path(args.folder)
        folder.mkdir(parents=True, exist_ok=True)
        write_csv(found, folder / "transmission_loss.csv")
        PICTURES["transmission_loss"].make(found, folder / "transmission_loss.png")
    return DONE


def text(found: Transmission) -> str:
    """One row per line."""
    rows = [
        (f"{f:g}", f"{loss:.1f}" if np.isfinite(loss) else "-")
        for f, loss in zip(found.result.frequencies, found.loss, strict=True)
    ]
    head = f"Transmission loss from {found.inlet} to {found.outlet}, {found.limit}"
    return f"{head}\n{table(('frequency [Hz]', 'loss [dB]'), rows)}\n{REMARK}\n{CAUTIONS}"


register(
    Command(
        "transmission",
        "Print the transmission loss of a duct between two ports.",
        "  murmesh transmission duct_result.h5 losses --outlet outlet",
        arguments,
        run,
    )
)
