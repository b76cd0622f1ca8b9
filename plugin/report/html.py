"""HTML from Python: what is not `Html` already is text and gets escaped, so nothing a user names can become markup."""

from __future__ import annotations

import base64
import html
import io
import json
from collections.abc import Iterable, Sequence
from typing import Any

from matplotlib.figure import Figure

from murmesh.plugin.pictures.style import DPI, look

_VOID = ("img", "meta", "br", "input")


class Html(str):
    """Text that is markup already."""

    __slots__ = ()


def text(value: object) -> Html:
    """Markup as it is, anything else escaped."""
    return value if isinstance(value, Html) else Html(html.escape(str(value), quote=True))


def tag(element: str, /, *children: object, **attributes: object) -> Html:
    """An element; an underscore at the end of an attribute's name falls away, others become dashes; None leaves it out."""
    given = {key.rstrip("_").replace("_", "-"): value for key, value in attributes.items() if value is not None}
    head = "".join(f' {key}="{text(value)}"' for key, value in given.items())
    return Html(f"<{element}{head}>") if element in _VOID else Html(f"<{element}{head}>{join(children)}</{element}>")


def join(parts: Iterable[object]) -> Html:
    """Parts one after the other."""
    return Html("".join(text(part) for part in parts))


def table(header: Sequence[object], rows: Iterable[Sequence[object]], *, words: int = 1, caption: str = "") -> Html:
    """A table whose first `words` columns are words, set to the left, the others numbers, set to the right."""

    def cells(name: str, row: Sequence[object]) -> Html:
        return tag("tr", *(tag(name, cell, class_=None if i < words else "number") for i, cell in enumerate(row)))

    head = tag("thead", cells("th", header))
    body = tag("tbody", *(cells("td", row) for row in rows))
    return tag("div", tag("table", tag("caption", caption) if caption else "", head, body), class_="wide")


def picture(figure: Figure, caption: str) -> Html:
    """A figure inside the page."""
    stream = io.BytesIO()
    with look():
        figure.savefig(stream, dpi=DPI, format="png")
    source = f"data:image/png;base64,{base64.b64encode(stream.getvalue()).decode()}"
    return tag("figure", tag("img", src=source, alt=caption), tag("figcaption", caption))


def data(name: str, tree: dict[str, Any]) -> Html:
    """A tree for the page's own script; no text in it can end the element it stands in."""
    held = json.dumps(tree, allow_nan=False).replace("<", "\\u003c").replace(">", "\\u003e").replace("&", "\\u0026")
    return Html(f'<script type="application/json" id="{text(name)}">{held}</script>')


def note(*children: object) -> Html:
    """A remark that belongs to what stands above it."""
    return tag("p", *children, class_="note")


def not_computed(why: str) -> Html:
    """Where an answer would stand, and why there is none."""
    return tag("p", tag("strong", "Not computed. "), why, class_="missing")
