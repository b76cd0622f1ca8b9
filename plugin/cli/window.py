"""murmesh window: a model or job in gmsh's own window, with murmesh's parameters in its tree."""

from __future__ import annotations

import argparse

from murmesh.plugin.cli.command import DONE, Command, register
from murmesh.plugin.mesh_source import UNITS
from murmesh.plugin.probe import require_window


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("model", help="gmsh script or .geo, STEP, BREP, .msh, or a job file (.toml)")
    parser.add_argument("job", nargs="?", help="job file to read and to save to (default: MODEL.toml)")
    parser.add_argument("--unit", choices=tuple(UNITS), help="unit of the coordinates, where no job says it")


def run(args: argparse.Namespace) -> int:
    require_window()
    from murmesh.plugin.gmsh_session import gmsh_session
    from murmesh.plugin.window.opening import open_files
    from murmesh.plugin.window.window import Window

    with gmsh_session():
        Window(*open_files(args.model, args.job, args.unit)).run()
    return DONE


register(
    Command(
        "window",
        "Open a model or job in gmsh's window: assign kinds by picking, check, solve, look at the result.",
        "  murmesh window booth.step booth.toml --unit mm",
        arguments,
        run,
    )
)
