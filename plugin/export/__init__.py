"""Exports: one file per format, each `write(result, path, **options) -> path`; `EXPORTS` lists them."""

from __future__ import annotations

from murmesh.plugin.products import Products

EXPORTS = Products(__name__)
