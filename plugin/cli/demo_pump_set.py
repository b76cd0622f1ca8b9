"""murmesh demo --model pump_set: an enclosure that radiates through a bend; what do linings bring outside?"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

from murmesh.plugin.check import check_case, render
from murmesh.plugin.cli.command import answer, say, show, table
from murmesh.plugin.job import Job, RegionEntry
from murmesh.plugin.model import build_case
from murmesh.plugin.pictures.variants import draw_losses, draw_maps, draw_powers
from murmesh.plugin.probe import require_gmsh
from murmesh.plugin.summary import CAUTIONS, trust
from murmesh.plugin.variants import Variant, Variants, summary_header, summary_rows, write_losses, write_powers
from murmesh.solver.case.hdf5 import write_case
from murmesh.solver.case.model import Case
from murmesh.solver.result import write_result
from murmesh.solver.space import discretise
from murmesh.solver.sweep import Journal, solve
from murmesh.solver.treatment import options, treated_case

SOURCES = ("pump_set.py", "pump_set.toml")
REFERENCE, BARE = "no enclosure", "bare enclosure"
LININGS = {
    "enclosure lined": ("enclosure_lining",),
    "bend lined": ("bend_lining",),
    "both lined": ("enclosure_lining", "bend_lining"),
}
"""Treatments of the job's catalogue, each wherever it may go, by variant."""
SHELL = ("shell", "enclosure_*", "bend_walls", "shell_outside")
"""The enclosure's volume and its surfaces in the job."""
MAP_LINE = 250.0
"""Frequency [Hz] of the level maps."""
LESSON = (
    "Walls that neither absorb nor let through only lead sound to the opening: what is not absorbed leaves through the bend,\n"
    "and where the air resonates the bare enclosure can be louder than none. A lining pays where all the sound must pass it."
)


def run(folder: Path) -> None:
    """Solve the variants and put tables and pictures into `folder`, which holds the job."""
    require_gmsh()
    job = Job.from_toml(folder / "pump_set.toml")
    say("1/3  wrapping and meshing the pump set, with its enclosure and without")
    cases = dict(_cases(job, folder))
    say(render(check_case(cases[BARE])))
    say(f"2/3  solving {len(cases)} variants, {len(job.require_sweep().frequencies)} lines each")
    solved = [_solved(name, case, folder) for name, case in cases.items()]
    found = Variants(solved[0], tuple(solved[1:]))
    say("3/3  tables and pictures")
    _answers(found)
    _files(found, folder)


def _cases(job: Job, folder: Path) -> Iterator[tuple[str, Case]]:
    yield REFERENCE, _case(without_enclosure(job), folder)
    bare = _case(job, folder)
    yield BARE, bare
    choices = options(bare, discretise(bare))
    for name, treatments in LININGS.items():
        yield name, treated_case(bare, [option for option in choices if option.treatment in treatments])


def _case(job: Job, folder: Path) -> Case:
    return build_case(job, job.read_mesh(folder))


def without_enclosure(job: Job) -> Job:
    """The same machine in the open: the enclosure's walls are air, and all air is that outside."""
    assert job.wrap is not None
    [outside] = [entry for entry in job.regions if entry.name == job.wrap.air]
    names = (*(entry.name for entry in job.regions), SHELL[0])
    regions = tuple(RegionEntry(name, outside.medium, outside.damping) for name in names)
    surfaces = tuple(entry for entry in job.surfaces if entry.name not in SHELL)
    wrap = job.wrap.with_(solid=())
    return job.with_(title=f"{job.title}, no enclosure", wrap=wrap, regions=regions, surfaces=surfaces, catalogue=())


def _solved(name: str, case: Case, folder: Path) -> Variant:
    """One sweep each; the error bar costs as much again, so the bare enclosure alone, the most resonant, has one."""
    say(f"     {name}")
    stem = name.replace(" ", "_")
    case = case.with_(sweep=case.sweep.with_(error_bar=name == BARE))
    write_case(case, folder / f"{stem}.h5")
    journal = Journal.at(folder / f"{stem}_result.h5")
    result = solve(case, journal, report=show)
    write_result(result, folder / f"{stem}_result.h5")
    Journal(journal).forget()
    return Variant(name, result)


def _answers(found: Variants) -> None:
    answer(f"Levels at 1 m, insertion loss against '{REFERENCE}', radiated power")
    answer(table(summary_header(found), summary_rows(found)))
    for receiver in found.receivers:
        answer(f"\nInsertion loss at {receiver} [dB] per third octave [Hz]")
        losses = [(variant.name, found.loss(variant, receiver)) for variant in found.others]
        header = ("variant", *(band.nominal for band in losses[0][1].bands))
        answer(table(header, [(name, *(f"{value:+.1f}" for value in loss.values)) for name, loss in losses]))
    bare = next(variant for variant in found.others if variant.name == BARE)
    answer(f"\n{LESSON}\n{BARE}: {trust(bare.result)}")
    answer(f"\n{CAUTIONS}\nAll data of this demonstration are invented.\n")


def _files(found: Variants, folder: Path) -> None:
    answer(str(write_losses(found, folder / "insertion_loss.csv")))
    answer(str(write_powers(found, folder / "power_split.csv")))
    pictures = folder / "pictures"
    pictures.mkdir(exist_ok=True)
    answer(str(draw_losses(found, pictures / "insertion_loss.png")))
    answer(str(draw_powers(found, pictures / "power_split.png")))
    shown = [variant for variant in found.others if variant.name in (BARE, "both lined")]
    answer(str(draw_maps(shown, pictures / "level_maps.png", frequency=MAP_LINE, y=0.0, low=(-1.1, 0.0), high=(1.9, 1.4))))
