"""Small drawings written straight as SVG: interval bars of tables and trends over epochs.

They use the page's CSS variables, carry no text from recordings, and are hidden from screen readers
because the numbers stand beside them in words.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from markupsafe import Markup

from leakpipe.estimates import Estimate

BAR_WIDTH, BAR_HEIGHT = 120, 14
TREND_WIDTH, TREND_HEIGHT = 300, 84
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
    """One epoch of a trend: its estimate and whether it was flagged."""

    estimate: Estimate
    flagged: bool = False


def trend(moments: Sequence[Moment], color: str) -> Markup:
    """Return values with intervals over epochs, evenly spaced; flagged ones are large diamonds.

    The scale runs from the lowest to the highest end that is known, and includes zero where zero is
    near, because a rise from 1.0 to 1.1 should not look like one from 0 to 1.
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

    def height(amount: float) -> float:
        return TREND_HEIGHT - EDGE - (amount - low) / span * (TREND_HEIGHT - 2 * EDGE)

    zero = height(0.0)
    parts = [f'<path d="M0 {zero:.1f}H{TREND_WIDTH}" stroke="var(--hair)"/>']
    for place, moment in enumerate(moments):
        x = EDGE + place * step
        one = moment.estimate
        if one.low is not None and one.high is not None:
            parts.append(
                f'<path d="M{x:.1f} {height(one.low):.1f}V{height(one.high):.1f}" '
                f'stroke="var(--{color})" opacity="0.55"/>'
            )
        if one.value is None:
            continue
        y = height(one.value)
        if moment.flagged:
            parts.append(
                f'<path d="M{x:.1f} {y - 6:.1f}l6 6l-6 6l-6 -6z" fill="var(--surface)" '
                f'stroke="var(--ink)" stroke-width="1.6"/>'
            )
        else:
            parts.append(f'<circle cx="{x:.1f}" cy="{y:.1f}" r="2.4" fill="var(--{color})"/>')
    return Markup(
        f'<svg class="trend" viewBox="-4 -4 {TREND_WIDTH + 8} {TREND_HEIGHT + 8}" '
        f'aria-hidden="true">{"".join(parts)}</svg>'
    )
