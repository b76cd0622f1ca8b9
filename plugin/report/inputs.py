"""What was put in, where it comes from, and in which convention."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from murmesh.plugin.declared import words
from murmesh.plugin.describe import CONVENTION, hertz
from murmesh.plugin.report.html import Html, join, note, table, tag
from murmesh.plugin.report.review import Review
from murmesh.solver.case.load import LoadCase
from murmesh.solver.case.model import Case
from murmesh.solver.result import Result

TITLE = "Inputs"


def section(review: Review) -> Html:
    """Provenance, media, surfaces, loads, receivers."""
    result, case = review.result, review.result.case
    parts = [
        table(("entry", "value"), list(_provenance(result)), words=2),
        note(f"Convention: {CONVENTION}. A person's velocity is positive into the air; it is turned once, on entry."),
        tag("h3", "Media"),
        table(("region", "medium", "losses"), [(r.name, words(r.medium), words(r.damping)) for r in case.regions], words=3),
        tag("h3", "Surfaces"),
        table(("surface", "kind", "area [m²]"), list(_surfaces(case)), words=2),
        *(_loads(held) for held in case.load_cases),
        tag("h3", "Receivers"),
        table(("receiver", "x, y, z [m]", "averaged over a sphere of radius [m]", "measured spectrum"), _receivers(case)),
    ]
    return join(parts)


def _provenance(result: Result) -> Iterator[tuple[str, str]]:
    case, f = result.case, result.frequencies
    yield "title", case.title or "untitled"
    yield "case checksum (SHA-256)", case.checksum
    yield "mesh", words(case.mesh)
    yield "frequencies", f"{len(f)} lines, {hertz(float(f[0]))} to {hertz(float(f[-1]))}"
    for key, value in result.provenance.items():
        if key != "case_checksum":
            yield key.replace("_", " "), value


def _surfaces(case: Case) -> Iterator[tuple[str, str, str]]:
    x = case.mesh.nodes[case.mesh.triangles[:, :3]]
    area = 0.5 * np.linalg.norm(np.cross(x[:, 1] - x[:, 0], x[:, 2] - x[:, 0]), axis=1)
    for index, surface in enumerate(case.surfaces):
        own = float(area[case.mesh.triangle_surface == index].sum())
        yield surface.name, words(surface.boundary), f"{own:.3g}"


def _loads(held: LoadCase) -> Html:
    spectrum = "tones, summed" if held.spectrum == "tones" else f"density, amplitudes of {held.bandwidth:g} Hz"
    head = tag("h3", f"Load case {held.name}: {spectrum}; loads combine {words(held.combination)}")
    return join([head, table(("load", "what it is"), [(load.name, words(load)) for load in held.loads], words=2)])


def _receivers(case: Case) -> list[tuple[str, ...]]:
    return [
        (r.name, ", ".join(f"{v:.3g}" for v in r.position), f"{r.radius:g}", "yes" if r.measured else "no")
        for r in case.receivers
    ]
