"""Pictures: one file per picture, each `draw(result, path, **options) -> path` to a PNG; `PICTURES` lists them."""

from __future__ import annotations

from murmesh.plugin.products import Products

PICTURES = Products(__name__)
