"""The page: its sections in order, its style and its promise to reach for nothing outside itself."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path
from types import ModuleType

from murmesh.plugin.describe import origin
from murmesh.plugin.files import written
from murmesh.plugin.report import inputs, levels, limits, maps, power, question, rankings, treatments, validity
from murmesh.plugin.report.html import Html, join, tag
from murmesh.plugin.report.review import Review
from murmesh.plugin.report.treatments import Tree

SECTIONS: tuple[ModuleType, ...] = (question, levels, rankings, treatments, maps, power, validity, inputs, limits)
# a browser that obeys this cannot load anything, whatever stands in the page
_POLICY = "default-src 'none'; img-src data:; style-src 'unsafe-inline'; script-src 'unsafe-inline'"


def write_page(review: Review, path: Path, found: Tree | None = None) -> Path:
    """Write the page as one file; `found` is the tree of a study of treatments, where there is one."""
    with written(path) as scratch:
        scratch.write_text(page(review, found), encoding="utf-8")
    return Path(path)


def page(review: Review, found: Tree | None = None) -> Html:
    """The page as text."""
    title = f"Review: {review.result.case.title or 'untitled case'}"
    style = Html((files("murmesh.plugin.report") / "page.css").read_text(encoding="utf-8"))
    head = tag(
        "head",
        tag("meta", charset="utf-8"),
        tag("meta", http_equiv="Content-Security-Policy", content=_POLICY),
        tag("meta", name="viewport", content="width=device-width, initial-scale=1"),
        tag("title", title),
        tag("style", style),
    )
    body = tag(
        "body", tag("h1", title), tag("p", origin(review.result), class_="note"), _contents(), *_sections(review, found)
    )
    return join([Html("<!DOCTYPE html>\n"), tag("html", head, body, lang="en"), "\n"])


def _name(module: ModuleType) -> str:
    return module.__name__.rpartition(".")[2]


def _contents() -> Html:
    return tag("nav", *(tag("a", module.TITLE, href=f"#{_name(module)}") for module in SECTIONS))


def _sections(review: Review, found: Tree | None) -> list[Html]:
    more = {treatments: (found,)}
    return [tag("section", tag("h2", m.TITLE), m.section(review, *more.get(m, ())), id=_name(m)) for m in SECTIONS]
