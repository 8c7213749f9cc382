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
    parts += [
        _mark(moment, EDGE + place * step, y_of, color) for place, moment in enumerate(moments)
    ]
    return Markup(
        f'<svg class="trend" viewBox="-4 {-room} {TREND_WIDTH + 8} {height + room + 4}" '
        f'aria-hidden="true">{"".join(parts)}</svg>'
    )


def _mark(moment: Moment, x: float, y_of: Callable[[float], float], color: str) -> str:
    """Return one epoch's interval and marker, with its words as a tooltip."""
    one = moment.estimate
    parts = [f"<title>{escape(moment.words)}</title>"] if moment.words else []
    if one.low is not None and one.high is not None:
        parts.append(
            f'<path d="M{x:.1f} {y_of(one.low):.1f}V{y_of(one.high):.1f}" '
            f'stroke="var(--{color})" opacity="0.55"/>'
        )
    if one.value is not None and moment.flagged:
        parts.append(
            f'<path d="M{x:.1f} {y_of(one.value) - 6:.1f}l6 6l-6 6l-6 -6z" '
            f'fill="var(--surface)" stroke="var(--ink)" stroke-width="1.6"/>'
        )
    elif one.value is not None:
        parts.append(
            f'<circle cx="{x:.1f}" cy="{y_of(one.value):.1f}" r="2.4" fill="var(--{color})"/>'
        )
    return f"<g>{''.join(parts)}</g>"
