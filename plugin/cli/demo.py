"""murmesh demo: the demonstration cab, from geometry to pictures; or the pump set, whose enclosure radiates."""

from __future__ import annotations

import argparse
import shutil
import time
from importlib.resources import as_file, files
from pathlib import Path

from murmesh.plugin.check import check_case, render
from murmesh.plugin.cli import demo_pump_set
from murmesh.plugin.cli import levels as levels_command
from murmesh.plugin.cli import rank as rank_command
from murmesh.plugin.cli import treat as treat_command
from murmesh.plugin.cli.command import CANNOT, DONE, Command, answer, register, say, show
from murmesh.plugin.cli.draw import draw
from murmesh.plugin.cli.export import export
from murmesh.plugin.cli.solve import summary
from murmesh.plugin.export import EXPORTS
from murmesh.plugin.load import load_case_file
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.probe import gmsh_missing
from murmesh.plugin.report.page import write_page
from murmesh.plugin.report.review import Review
from murmesh.plugin.study import study, tree
from murmesh.plugin.summary import CAUTIONS, all_levels, trust
from murmesh.solver.case.hdf5 import read_case, write_case
from murmesh.solver.case.model import Case
from murmesh.solver.contribution import rank
from murmesh.solver.errors import ResultError
from murmesh.solver.result import Result, write_result
from murmesh.solver.sweep import Journal, solve

TARGET = 78.0
"""Level [dB(A)] that the demonstration's page asks for; invented as everything in it."""
SHIPPED = "cab_case.h5"
"""The case that the job `cab.toml` gives, in the wheel, for machines where gmsh cannot run."""
SOURCES = ("cab.py", "cab.toml", "cab_broadband.csv", "cab_tones.csv")


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("folder", help="folder for everything the demonstration makes; made if it is missing")
    parser.add_argument(
        "--model",
        choices=("cab", "pump_set"),
        default="cab",
        help="cab: panels and treatments inside (default); pump_set: an enclosure that radiates through a bend",
    )


def run(args: argparse.Namespace) -> int:
    started = time.monotonic()
    folder = Path(args.folder)
    _make(folder)
    if args.model == "pump_set":
        _copy(folder, demo_pump_set.SOURCES)
        demo_pump_set.run(folder)
        say(f"finished in {time.monotonic() - started:.0f} s; everything is in {folder}")
        return DONE
    case, left_out = _case(folder)
    result = _solve(case, folder)
    _answers(result)
    left_out += _files(result, folder)
    left_out += _treatment(result, folder)
    say(f"finished in {time.monotonic() - started:.0f} s; everything is in {folder}")
    if left_out:
        say("murmesh: the demonstration is complete but for what this machine cannot do:")
        for message in left_out:
            say(f"  {message}")
    return CANNOT if left_out else DONE


def _make(folder: Path) -> None:
    if folder.exists() and not folder.is_dir():
        raise ResultError(f"'{folder}' is a file; give the name of a folder")
    folder.mkdir(parents=True, exist_ok=True)


def _case(folder: Path) -> tuple[Case, list[str]]:
    """The case, meshed anew from the job's own geometry; the shipped one where gmsh is missing."""
    job = _copy_job(folder)
    missing = gmsh_missing()
    if missing:
        say("1/6  gmsh cannot run here: taking the case that ships with murmesh")
        with as_file(files("murmesh.sample_geometry") / SHIPPED) as shipped:
            case = read_case(shipped)
    else:
        say(f"1/6  meshing and tagging the cab ({job})")
        case = load_case_file(job)
    say(render(check_case(case)))
    write_case(case, folder / "cab.h5")
    return case, [f"geometry and mesh: {missing}"] if missing else []


def _copy_job(folder: Path) -> Path:
    _copy(folder, SOURCES)
    return folder / "cab.toml"


def _copy(folder: Path, names: tuple[str, ...]) -> None:
    """A job and its files, so that the user can change them and run it again."""
    for name in names:
        with as_file(files("murmesh.sample_geometry") / name) as source:
            shutil.copyfile(source, folder / name)


def _solve(case: Case, folder: Path) -> Result:
    lines = case.sweep.frequencies
    say(f"2/6  solving {len(lines)} lines, {lines[0]:g} .. {lines[-1]:g} Hz, {len(case.load_cases)} load cases")
    journal = Journal.at(folder / "cab_result.h5")
    result = solve(case, journal, report=show)
    write_result(result, folder / "cab_result.h5")
    Journal(journal).forget()
    say(summary(result))
    return result


def _answers(result: Result) -> None:
    say("3/6  levels and rankings")
    answer(levels_command.text(all_levels(result)))
    answer(f"\n{trust(result)}")
    for held in result.load_cases:
        answer("")
        answer(rank_command.text(rank(result, [], load_case=held.name)))
    answer(f"\n{CAUTIONS}\nAll data of this demonstration are invented.\n")


def _files(result: Result, folder: Path) -> list[str]:
    say("4/6  tables and VTK files")
    export(result, folder / "files", EXPORTS.of(result))
    say("5/6  pictures")
    pictures = PICTURES.of(result)
    first, *others = [held.name for held in result.load_cases]
    left_out = draw(result, folder / "pictures", pictures, load_case=first)
    for name in others:
        flat = [picture for picture in pictures if not picture.renders]
        draw(result, folder / "pictures", flat, prefix=f"{name}_", load_case=name)
    return [f"pictures: {', '.join(left_out)} (the line that cures it stands above)"] if left_out else []


def _treatment(result: Result, folder: Path) -> list[str]:
    """Which trim part to treat, with what, for how many dB, within the limits of the job."""
    say("6/6  treatments: two rankings, a choice within limits, its verification; the page for a review")
    found = study(result, samples=treat_command.SAMPLES, report=lambda words: say(f"     {words}"))
    answer(treat_command.text(found))
    status = treat_command.products(found, folder / "treatment")
    answer(str(write_page(Review(result, target=TARGET), folder / "review.html", tree(found))))
    return ["treatment: one picture (the line that cures it stands above)"] if status == CANNOT else []


register(
    Command(
        "demo",
        "Run a demonstration: an invented cab, from geometry to a verified choice of treatments; or an enclosure outside.",
        "  murmesh demo cab_demo\n  murmesh demo --model pump_set pump_set_demo",
        arguments,
        run,
    )
)
