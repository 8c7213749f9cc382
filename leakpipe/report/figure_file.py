"""A written figure, as the page needs it; importing this does not import matplotlib."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path


@dataclass(frozen=True)
class FigureFile:
    """One figure of one patch on disk, or the reason why there is none.

    Attributes
    ----------
    name
        Short stable name, words joined by hyphens; the files' stem without patch and basis.
    place
        Patch and basis, such as ``"west Z"``.
    title, caption, alt
        Heading, what to read in it and with which care, and what it shows in words for people who
        cannot see it.
    wide
        Whether it needs the full width of a page.
    svg, png
        The files; None where the figure could not be drawn.
    missing
        Why there is no figure; empty if there is one.
    """

    name: str
    place: str
    title: str
    caption: str = ""
    alt: str = ""
    wide: bool = False
    svg: Path | None = None
    png: Path | None = None
    missing: str = ""
