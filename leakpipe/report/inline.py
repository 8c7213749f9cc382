"""Figures as parts of a page: SVG files made fit to stand inside HTML."""

from __future__ import annotations

import re
from pathlib import Path

from markupsafe import Markup, escape

from leakpipe.report.palette import themed

_NOT_FOR_PAGES = re.compile(
    r"<\?xml.*?\?>|<!DOCTYPE.*?>|<!--.*?-->|<metadata>.*?</metadata>|<style[^>]*>.*?</style>",
    re.DOTALL,
)
_NAMESPACES = re.compile(r'\s+xmlns(:\w+)?="[^"]*"')
_SIZE = re.compile(r'\s(width|height)="[^"]*"')
_FAMILY = re.compile(r"'DejaVu Sans'[^;\"]*")


def inline(path: Path, alt: str, name: str) -> Markup:
    """Return an SVG file as an element of a page.

    Its colours become CSS variables, so that it follows light and dark; its ids get a prefix, so
    that several figures can stand in one page; what would point outside the page is removed; the
    size is left to the page.

    Parameters
    ----------
    path
        A file written by `leakpipe.report.figures.write_figures`: text in it is escaped already.
    alt
        What it shows, in words.
    name
        Prefix of its ids.
    """
    text = _NOT_FOR_PAGES.sub("", path.read_text(encoding="utf-8")).strip()
    head, rest = text.split(">", 1)
    head = _SIZE.sub("", _NAMESPACES.sub("", head))
    rest = rest.replace("xlink:href=", "href=")
    rest = re.sub(r'style="[^"]*"', lambda match: _restyled(match.group()), rest)
    body = _own_ids(f"{head}>{rest}", re.sub(r"[^A-Za-z0-9-]+", "-", name))
    return Markup(body.replace("<svg", f'<svg role="img" aria-label="{escape(alt)}"', 1))


def _restyled(style: str) -> str:
    """Theme the colours of a style attribute and let the page choose the font."""
    return _FAMILY.sub("sans-serif", themed(style))


def _own_ids(svg: str, prefix: str) -> str:
    """Prefix ids and the references to them, in tags only (text between tags stays)."""

    def in_tag(match: re.Match[str]) -> str:
        tag = re.sub(r'(\sid=")', rf"\g<1>{prefix}-", match.group())
        tag = re.sub(r'(\shref="#)', rf"\g<1>{prefix}-", tag)
        return re.sub(r"(url\(#)", rf"\g<1>{prefix}-", tag)

    return re.sub(r"<[^>]*>", in_tag, svg)
