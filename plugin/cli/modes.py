"""murmesh modes: cavity modes, undamped or with every loss of the case."""

from __future__ import annotations

import argparse

import numpy as np

from murmesh.plugin.cli.command import DONE, Command, answer, answer_json, register, table
from murmesh.plugin.load import load_case_file
from murmesh.solver.damped_modes import DampedModes, damped_modes
from murmesh.solver.errors import CaseError
from murmesh.solver.modes import modes


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("case", help="case file, or a job file")
    parser.add_argument("--near", type=float, default=0.0, help="frequency [Hz] to look around (default: from 0 up)")
    parser.add_argument("--count", type=int, default=12, help="how many modes (default 12)")
    parser.add_argument("--order", type=int, default=0, help="polynomial order (default: chosen)")
    parser.add_argument("--damped", action="store_true", help="with all losses: complex frequencies, T60 and loss factor")
    parser.add_argument("--draw", metavar="FOLDER", help="draw the shapes into this folder")
    parser.add_argument("--json", action="store_true", help="print JSON")


def run(args: argparse.Namespace) -> int:
    case = load_case_file(args.case)
    if args.damped:
        if args.draw:
            raise CaseError("--draw shows undamped shapes; leave out --damped or --draw")
        _damped(damped_modes(case, args.count, args.near, args.order), args.json)
        return DONE
    found = modes(case, args.count, args.near, args.order)
    if args.json:
        answer_json({"frequencies_hz": [round(float(f), 4) for f in found.frequencies]})
    else:
        rows = [(str(i + 1), f"{f:.2f}") for i, f in enumerate(found.frequencies)]
        answer(table(("mode", "frequency [Hz]"), rows))
        answer("Hard walls, no losses; 0 Hz is the uniform pressure.")
    if args.draw:
        from murmesh.plugin.pictures.mode_shape import draw_all

        for path in draw_all(found, args.draw):
            answer(str(path))
    return DONE


def _damped(found: DampedModes, as_json: bool) -> None:
    rising = np.argsort(found.frequencies.real)
    f, loss, t60, held = (
        values[rising] for values in (found.frequencies, found.loss_factors, found.reverberation_times, found.held)
    )
    if as_json:
        answer_json({"frequencies_hz": [[round(v.real, 4), round(v.imag, 4)] for v in f.tolist()]})
        return
    rows = [
        (str(i + 1), f"{f[i].real:.2f}{'*' if held[i] else ''}", f"{f[i].imag:.3f}", f"{loss[i]:.4f}", f"{t60[i]:.3g}")
        for i in range(len(f))
    ]
    answer(table(("mode", "frequency [Hz]", "decay Im f [Hz]", "loss factor", "T60 [s]"), rows))
    answer("With every loss of the case; e^{iwt}, Im f > 0 dies out; T60 = ln(1000) / (2 pi Im f).")
    if held.any():
        answer("* outside the sweep: the laws are held at the end of the band.")


register(
    Command(
        "modes",
        "Find the cavity modes nearest to a frequency, undamped or with every loss of the case.",
        "  murmesh modes cab.h5 --near 95 --count 6",
        arguments,
        run,
    )
)
