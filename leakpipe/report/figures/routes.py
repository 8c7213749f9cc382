"""The routes of the leakage share side by side with the reported one."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes

from leakpipe.estimates import Estimate
from leakpipe.report.figures.style import COLUMN, Drawing, NothingToDraw, canvas, short_name
from leakpipe.report.inputs import PatchReport
from leakpipe.report.palette import LIGHT
from leakpipe.report.wording import UNKNOWN, percent

TITLE = "Leakage's share of the logical error, by route"


def draw(patch: PatchReport, place: str) -> Drawing:
    """Draw the reported share and every route with its interval; limits as arrows.

    Raises
    ------
    NothingToDraw
        Neither the share nor any route says anything.
    """
    rows = [("reported", patch.estimate("share", "leakage_share"))]
    for name in patch.labels("share", "route"):
        rows.append((str(name), patch.estimate("share", "share_route", {"route": name})))
    if not any(_says_something(estimate) for _, estimate in rows):
        raise NothingToDraw(f"no route gives a share: {rows[0][1].basis}")
    statistical = patch.estimate("share", "leakage_share_statistical")
    figure = canvas(COLUMN, 1.15 + 0.42 * len(rows), TITLE, place)
    axes = figure.subplots()
    axes.grid(visible=True, axis="x")
    axes.grid(visible=False, axis="y")
    for row, (name, estimate) in enumerate(rows):
        color = "third" if row == 0 else "data"
        _row(axes, row, estimate, color, statistical if row == 0 else None)
        if not _says_something(estimate):
            axes.text(
                0.01, row, f"{UNKNOWN}: {short_name(estimate.basis, 44)}",
                transform=axes.get_yaxis_transform(), va="center", size=8, color=LIGHT["quiet"],
            )  # fmt: skip
        if name == "reported":
            axes.axhline(row + 0.5, color=LIGHT["hair"], linewidth=0.8)
    axes.set_yticks(range(len(rows)), [short_name(name, 18) for name, _ in rows])
    axes.set_ylim(len(rows) - 0.5, -0.5)
    axes.tick_params(axis="y", length=0)
    axes.spines["left"].set_visible(False)
    axes.margins(x=0.06)
    left, right = axes.get_xlim()
    axes.set_xlim(min(left, 0.0), max(right, 1.0))
    axes.axvline(0, color=LIGHT["quiet"], linewidth=0.8)
    axes.set_xlabel("share of the logical error per round (%)")
    said = "; ".join(f"{name} {percent(estimate)}" for name, estimate in rows)
    return Drawing(
        figure,
        TITLE,
        "Thin lines: 95 % intervals with the model error of each route; the thick part of the "
        "reported one is statistics alone. Arrows are limits. The routes share data, so agreement "
        "is weaker evidence than it looks; disagreement is a finding.",
        f"Shares by route: {said}.",
    )


def _says_something(estimate: Estimate) -> bool:
    return any(end is not None for end in (estimate.value, estimate.low, estimate.high))


def _row(
    axes: Axes, row: int, estimate: Estimate, color: str, statistical: Estimate | None
) -> None:
    low, high = (None if end is None else 100 * end for end in (estimate.low, estimate.high))
    paint = LIGHT[color]
    if low is not None and high is not None:
        axes.plot([low, high], [row, row], color=paint, linewidth=1.4, solid_capstyle="butt")
    if statistical is not None and statistical.low is not None and statistical.high is not None:
        ends = [100 * statistical.low, 100 * statistical.high]
        axes.plot(ends, [row, row], color=paint, linewidth=4, alpha=0.55, solid_capstyle="butt")
    if estimate.value is not None:
        axes.plot([100 * estimate.value], [row], "o" if row else "D", color=paint, markersize=6)
        return
    for end, marker in ((high, "<"), (low, ">")):
        if end is not None and np.isfinite(end) and end > 0:
            axes.plot([end], [row], marker, color=paint, markersize=6)
