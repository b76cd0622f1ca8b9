"""How far the numbers can be trusted: mesh, error bar, certificate, Schroeder frequency, ranges of laws, balances."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from murmesh.plugin.check import check_case
from murmesh.plugin.describe import hertz
from murmesh.plugin.findings.finding import Finding
from murmesh.plugin.report.html import Html, join, note, table, tag
from murmesh.plugin.report.review import Review
from murmesh.plugin.summary import all_levels, outside_facts
from murmesh.solver.case.model import Case
from murmesh.solver.contribution import participation
from murmesh.solver.errors import CaseError
from murmesh.solver.levels import schroeder_frequency
from murmesh.solver.orders import orders_text
from murmesh.solver.result import Result

TITLE = "Validity"


def section(review: Review) -> Html:
    """A table of figures, then every finding of the check."""
    found = check_case(review.result.case)
    rows = [(item.severity, item.code.replace("_", " "), item.subject, _said(item)) for item in found]
    listed = table(("severity", "finding", "subject", "what was found, and the cure"), rows, words=4)
    figures = table(("check", "figure"), list(_figures(review.result, found)), words=2)
    remark = (
        "Not in these figures: how well the residual damping of hard walls is known (the draws of a study of treatments tell "
        "what it does here) and the spread between machines of one build (about 5 dB per third octave, common practice, no "
        "source). Gains are more certain than absolute levels."
    )
    return join([figures, note(remark), tag("h3", "Findings of the check"), listed if found else tag("p", "None.")])


def _said(item: Finding) -> str:
    return f"{item.message}. Cure: {item.cure}." if item.cure else item.message


def _figures(result: Result, found: tuple[Finding, ...]) -> Iterator[tuple[str, str]]:
    yield "elements", f"{len(result.case.mesh.tets):,} tetrahedra of {orders_text(result.orders)}"
    for item in found:
        if item.code == "elements_per_wavelength":
            yield f"elements per wavelength, {item.subject}", item.message
    yield "error bar of the mesh", _mesh_words(result)
    certificate = "direct solution of every line: no reduced model, none needed"
    yield "certificate of the sweep", result.certificate.words if result.certificate else certificate
    yield from outside_facts(result)
    residuals = np.concatenate([held.residual for held in result.load_cases] or [np.array([np.nan])])
    if np.isfinite(residuals).any():
        yield "largest residual of a linear system", f"{np.nanmax(residuals):.1e}"
    for held in result.load_cases:
        yield f"power balance, {held.name}", _imbalance_words(result, held.name)
        closures = [participation(result, r.name, held.name).closure for r in result.case.receivers]
        if closures:
            yield f"contributions against the total, {held.name}", f"{max(closures):.0e} of the mean square at worst"
    yield "Schroeder frequency", schroeder_words(result.case)
    worst = [item for item in found if item.severity != "note"]
    yield "findings", f"{len(worst)} errors or warnings, {len(found) - len(worst)} notes, listed below"


def _imbalance_words(result: Result, load_case: str) -> str:
    return f"what is put in and what is taken differ by {np.abs(result.imbalance(load_case)).max():.0e} of the input at worst"


def _mesh_words(result: Result) -> str:
    if result.mesh_error_db is None:
        return "not solved for; solve with error_bar = true"
    bars = [item.bars.overall for item in all_levels(result) if item.bars and np.isfinite(item.bars.overall)]
    widest = f"; overall levels ± {max(bars):.2g} dB at most" if bars else ""
    return f"{result.mesh_error_db:.2g} dB rms over lines and receivers, from elements of the next order{widest}"


def schroeder_words(case: Case) -> str:
    """2000 sqrt(T60/V) per region from its stated losses; absorbing surfaces, which would lower it, are not counted."""
    corners = case.mesh.nodes[case.mesh.tets[:, :4]]
    volumes = np.abs(np.linalg.det(corners[:, 1:] - corners[:, :1])) / 6
    return "; ".join(
        f"{region.name}: {_of_region(case, i, float(volumes[case.mesh.tet_region == i].sum()))}"
        for i, region in enumerate(case.regions)
    )


def _of_region(case: Case, index: int, volume: float) -> str:
    region, f = case.regions[index], case.sweep.frequencies
    try:
        eta = np.broadcast_to(region.damping.loss_factor(f, region.medium), f.shape)
    except CaseError:
        eta = np.zeros(len(f))
    if not np.any(eta > 0) or volume <= 0:
        return "not known, no loss of the volume is stated as T60 or loss factor"
    limit = np.array([schroeder_frequency(2.2 / (g * h), volume) if h > 0 else np.inf for g, h in zip(f, eta, strict=True)])
    above = np.flatnonzero(f >= limit)
    if not len(above):
        return f"above the sweep (2000 √(T60/V) is {hertz(float(limit[-1]))} at its end, {volume:.3g} m³): single modes matter"
    at = float(f[above[0]])
    return f"{hertz(at)} from the stated losses ({volume:.3g} m³); read band levels, not single lines, above it"
