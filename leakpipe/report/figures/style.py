"""How every figure looks, and how it becomes a file: Figure objects only, never pyplot."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import matplotlib as mpl
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.layout_engine import ConstrainedLayoutEngine
from numpy.typing import NDArray

from leakpipe.report.palette import LIGHT

COLUMN = 5.2
"""Width in inches of a figure that fits one column, and a phone at its own size."""

FULL = 7.6
"""Width in inches of a figure that needs the page."""

TITLE_ROOM = 0.42
"""Height in inches that the title and the line below it take."""

PNG_DPI = 160

Array = NDArray[np.float64]

_LOOK: dict[str, Any] = {
    "axes.axisbelow": True,
    "axes.edgecolor": LIGHT["quiet"],
    "axes.facecolor": LIGHT["surface"],
    "axes.grid": True,
    "axes.grid.axis": "y",
    "axes.labelcolor": LIGHT["ink"],
    "axes.labelsize": 9,
    "axes.linewidth": 0.7,
    "axes.spines.right": False,
    "axes.spines.top": False,
    "axes.unicode_minus": False,
    "errorbar.capsize": 0,
    "figure.facecolor": LIGHT["surface"],
    "font.family": ["DejaVu Sans"],
    "font.size": 9,
    "grid.color": LIGHT["hair"],
    "grid.linewidth": 0.6,
    "legend.frameon": False,
    "lines.linewidth": 1.6,
    "lines.markersize": 4.5,
    "savefig.facecolor": LIGHT["surface"],
    "svg.fonttype": "none",
    "text.color": LIGHT["ink"],
    # A qubit may be called anything; a dollar sign in its name must not start a formula.
    "text.parse_math": False,
    "xtick.color": LIGHT["quiet"],
    "ytick.color": LIGHT["quiet"],
    "xtick.labelcolor": LIGHT["ink"],
    "ytick.labelcolor": LIGHT["ink"],
    "xtick.labelsize": 8.5,
    "ytick.labelsize": 8.5,
}


@dataclass(frozen=True)
class Drawing:
    """A figure with its words.

    Attributes
    ----------
    figure
        The drawn figure.
    title, caption, alt
        See `leakpipe.report.figure_file.FigureFile`.
    """

    figure: Figure
    title: str
    caption: str
    alt: str


class NothingToDraw(Exception):
    """A figure's data are missing; the message says which, in words for the page."""


@contextmanager
def look() -> Iterator[None]:
    """Apply the report's style inside the context, whatever the user's own settings are."""
    with mpl.rc_context():
        mpl.rcdefaults()
        mpl.rcParams.update(_LOOK)  # type: ignore[arg-type]
        yield


def canvas(width: float, height: float, title: str, place: str) -> Figure:
    """Return an empty figure with its title and, quieter, which patch and epoch it shows."""
    top = 1 - TITLE_ROOM / height
    layout = ConstrainedLayoutEngine(rect=(0.005, 0.01, 0.985, top - 0.01))
    figure = Figure(figsize=(width, height), layout=layout)
    FigureCanvasAgg(figure)
    figure.text(0.012, 1 - 0.17 / height, title, weight="bold", va="center", size=10)
    figure.text(0.012, 1 - 0.33 / height, place, va="center", size=7.5, color=LIGHT["quiet"])
    return figure


def points(
    axes: Axes,
    x: Array,
    y: Array,
    error: Array | None,
    *,
    color: str,
    marker: str = "o",
    hollow: bool = False,
    label: str | None = None,
    zorder: float = 3,
) -> None:
    """Draw measured points with bars of one interval half width; hollow ones were not fitted."""
    axes.errorbar(
        x,
        y,
        yerr=error,
        fmt=marker,
        color=LIGHT[color],
        markerfacecolor=LIGHT["surface"] if hollow else LIGHT[color],
        markeredgewidth=1.0,
        elinewidth=1.0,
        linestyle="none",
        label=label,
        zorder=zorder,
    )


def band(axes: Axes, x: Array, low: Array | None, high: Array | None, color: str) -> None:
    """Draw an interval band where both ends are known."""
    if low is None or high is None:
        return
    known = np.isfinite(low) & np.isfinite(high)
    if known.any():
        axes.fill_between(
            x[known], low[known], high[known], color=LIGHT[color], alpha=0.2, linewidth=0
        )


def end_label(axes: Axes, x: float, y: float, text: str, color: str) -> None:
    """Write a curve's name beside its right end, in place of a legend."""
    axes.annotate(
        text,
        (x, y),
        xytext=(6, 0),
        textcoords="offset points",
        va="center",
        size=8.5,
        color=LIGHT[color],
        annotation_clip=False,
    )


def spread_apart(heights: Sequence[float], least: float) -> list[float]:
    """Return label heights moved as little as needed to stand at least `least` apart."""
    order = np.argsort(heights, kind="stable")
    moved = np.array(heights, dtype=float)[order]
    for _ in range(50):
        gaps = np.diff(moved)
        close = gaps < least - 1e-12
        if not close.any():
            break
        for place in np.flatnonzero(close):
            push = (least - (moved[place + 1] - moved[place])) / 2
            moved[place] -= push
            moved[place + 1] += push
    out = np.empty_like(moved)
    out[order] = moved
    return [float(height) for height in out]


def short_name(name: str, most: int = 14) -> str:
    """Return a name short enough for a label."""
    return name if len(name) <= most else f"{name[: most - 1]}…"


def write(figure: Figure, stem: Path) -> tuple[Path, Path]:
    """Write a figure as SVG and PNG beside each other.

    Call it inside `look()`. The files depend on the data only, not on the time or the machine.
    """
    svg, png = stem.with_suffix(".svg"), stem.with_suffix(".png")
    with mpl.rc_context({"svg.hashsalt": stem.name}):
        figure.savefig(svg, format="svg", metadata={"Date": None, "Creator": None})
    # The arrangement found for the first file serves the second: finding it takes half the time.
    figure.set_layout_engine("none")
    figure.savefig(png, format="png", dpi=PNG_DPI, metadata={"Software": None})
    return svg, png
