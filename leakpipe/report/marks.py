"""Small drawings written straight as SVG: interval bars of tables and trends over epochs.

They use the page's CSS variables and are hidden from screen readers, because the numbers stand
beside them in words. Text from recordings (names of epochs) is escaped.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from markupsafe import Markup, escape

from leakpipe.estimates import Estimate

BAR_WIDTH, BAR_HEIGHT = 120, 14
TREND_WIDTH = 300
TALL, LOW = 84, 44
"""Heights of the trends of the code and of the rows of a table."""

EDGE = 5
"""Pixels kept free at the ends, for the half of a marker that overhangs."""


def interval_bar(estimate: Estimate, largest: float, color: str) -> Markup:
    """Return an interval as a line with a dot, on a scale from 0 to `largest`."""
    if largest <= 0 or estimate.high is None or estimate.low is None:
        return Markup("")

    def at(amount: float) -> str:
        share = min(max(amount / largest, 0.0), 1.0)
        return f"{EDGE + share * (BAR_WIDTH - 2 * EDGE):.1f}"

    middle = BAR_HEIGHT / 2
    dot = (
        ""
        if estimate.value is None
        else f'<circle cx="{at(estimate.value)}" cy="{middle}" r="3.5" fill="var(--{color})"/>'
    )
    return Markup(
        f'<svg class="bar" viewBox="0 0 {BAR_WIDTH} {BAR_HEIGHT}" aria-hidden="true">'
        f'<path d="M{EDGE} {middle}H{BAR_WIDTH - EDGE}" stroke="var(--hair)"/>'
        f'<path d="M{at(estimate.low)} {middle}H{at(estimate.high)}" stroke="var(--{color})" '
        f'stroke-width="2"/>{dot}</svg>'
    )


@dataclass(frozen=True)
class Moment:
    """One epoch of a trend: its estimate, whether it was flagged, and what hovering shows."""

    estimate: Estimate
    flagged: bool = False
    words: str = ""


def trend(moments: Sequence[Moment], color: str, height: int, top_label: str = "") -> Markup:
    """Return values with intervals over epochs, evenly spaced; flagged ones are large diamonds.

    The scale starts at zero, because a rise from 1.0 to 1.1 should not look like one from 0 to 1.
    `top_label` says what the highest value is.
    """
    ends = [
        end
        for moment in moments
        for end in (moment.estimate.low, moment.estimate.high, moment.estimate.value)
        if end is not None
    ]
    if not ends:
        return Markup("")
    low, high = min(0.0, *ends), max(0.0, *ends)
    span = (high - low) or 1.0
    step = (TREND_WIDTH - 2 * EDGE) / max(len(moments) - 1, 1)

    def y_of(amount: float) -> float:
        return height - EDGE - (amount - low) / span * (height - 2 * EDGE)

    parts = [f'<path d="M0 {y_of(0.0):.1f}H{TREND_WIDTH}" stroke="var(--hair)"/>']
    values = [moment.estimate.value for moment in moments if moment.estimate.value is not None]
    room = 4
    if top_label and values:
        room = 14
        at = y_of(max(values))
        parts.append(
            f'<path d="M0 {at:.1f}H{TREND_WIDTH}" stroke="var(--hair)" stroke-dasharray="2 3"/>'
            f'<text x="0" y="-3" font-size="10" fill="var(--quiet)">'
            f"{escape(top_label)}</text>"
        )
    parts.append(_intervals(moments, step, y_of, color))
    parts.append(_values(moments, step, y_of, color))
    if height >= TALL:
        parts += [
            f'<path d="M{EDGE + place * step:.1f} 0V{height}" stroke="transparent" '
            f'stroke-width="{step:.1f}"><title>{escape(moment.words)}</title></path>'
            for place, moment in enumerate(moments)
            if moment.words
        ]
    return Markup(
        f'<svg class="trend" viewBox="-4 {-room} {TREND_WIDTH + 8} {height + room + 4}" '
        f'aria-hidden="true">{"".join(parts)}</svg>'
    )


def _intervals(
    moments: Sequence[Moment], step: float, y_of: Callable[[float], float], color: str
) -> str:
    """Return all intervals as one path: history pages hold thousands."""
    lines = [
        f"M{EDGE + place * step:.1f} {y_of(one.low):.1f}V{y_of(one.high):.1f}"
        for place, one in enumerate(moment.estimate for moment in moments)
        if one.low is not None and one.high is not None
    ]
    return f'<path d="{"".join(lines)}" stroke="var(--{color})" opacity="0.55"/>'


def _values(
    moments: Sequence[Moment], step: float, y_of: Callable[[float], float], color: str
) -> str:
    """Return dots (lines without length and with round ends), and diamonds where flagged."""
    dots, diamonds = [], []
    for place, moment in enumerate(moments):
        if moment.estimate.value is None:
            continue
        x, y = EDGE + place * step, y_of(moment.estimate.value)
        if moment.flagged:
            diamonds.append(f"M{x:.1f} {y - 6:.1f}l6 6l-6 6l-6 -6z")
        else:
            dots.append(f"M{x:.1f} {y:.1f}h0")
    said = (
        f'<path class="dots" d="{"".join(dots)}" stroke="var(--{color})" stroke-width="4.8" '
        f'stroke-linecap="round"/>'
    )
    if diamonds:
        said += (
            f'<path d="{"".join(diamonds)}" fill="var(--surface)" stroke="var(--ink)" '
            f'stroke-width="1.6"/>'
        )
    return said
