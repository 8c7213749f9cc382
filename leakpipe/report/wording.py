"""Numbers in words: percent, rounds and intervals with only the digits that mean something."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Sequence

from leakpipe.estimates import Estimate

UNKNOWN = "not identifiable"

MOST_DECIMALS = 5
"""More decimals than this are noise even for a leaked population (our choice)."""

DIGITS_WITHOUT_INTERVAL = 3
"""Significant digits of a number that has no interval (our choice)."""

TWO_DIGITS_BELOW = 3.55
"""An uncertainty with leading digits up to 354 keeps two digits, above that one. Rounding rule of
the Particle Data Group, Review of Particle Physics, Introduction; recalled from memory."""


def decimals_for(value: float, half_width: float | None) -> int:
    """Return how many decimals a value deserves, from the half width of its interval."""
    size = half_width if half_width is not None and half_width > 0 else None
    if size is None:
        if value == 0 or not math.isfinite(value):
            return 0
        digits = DIGITS_WITHOUT_INTERVAL - 1 - math.floor(math.log10(abs(value)))
    else:
        exponent = math.floor(math.log10(size))
        digits = -exponent + (1 if size / 10.0**exponent < TWO_DIGITS_BELOW else 0)
    return min(max(digits, 0), MOST_DECIMALS)


def _scaled(estimate: Estimate, scale: float) -> tuple[float | None, float | None, float | None]:
    value, low, high = (
        None if number is None else number * scale
        for number in (estimate.value, estimate.low, estimate.high)
    )
    return value, low, high


def number(estimate: Estimate, *, scale: float = 1.0, unit: str = "", sign: bool = False) -> str:
    """Return an estimate in words, such as ``"0.93 % (0.81 to 1.06)"``.

    A one-sided statement reads "below 0.12 %" or "above 40 rounds", an unknown one
    "not identifiable".

    Parameters
    ----------
    scale
        Factor applied first, 100 for percent.
    unit
        Put after the value, with a space.
    sign
        Show a plus sign, for changes.
    """
    value, low, high = _scaled(estimate, scale)
    unit = f" {unit}" if unit else ""
    if value is None:
        return _limit(low, high, unit)
    half_width = None if low is None or high is None else (high - low) / 2
    digits = decimals_for(value, half_width)
    plus = "+" if sign else ""
    text = f"{_zero(value, digits):{plus}.{digits}f}{unit}"
    if low is None or high is None:
        return text
    return f"{text} ({_zero(low, digits):.{digits}f} to {_zero(high, digits):.{digits}f})"


def _zero(value: float, digits: int) -> float:
    """Return the value rounded, without the minus sign of a negative zero."""
    return round(value, digits) + 0.0


def _limit(low: float | None, high: float | None, unit: str) -> str:
    if high is not None and (low is None or low <= 0):
        return f"below {high:.{decimals_for(high, None)}f}{unit}"
    if low is not None and high is None:
        return f"above {low:.{decimals_for(low, None)}f}{unit}"
    if low is not None and high is not None:
        digits = decimals_for(high, (high - low) / 2)
        return f"between {low:.{digits}f} and {high:.{digits}f}{unit}"
    return UNKNOWN


def percent(estimate: Estimate, *, sign: bool = False) -> str:
    """Return a fraction as percent with its interval."""
    return number(estimate, scale=100.0, unit="%", sign=sign)


def in_rounds(estimate: Estimate) -> str:
    """Return a number of rounds with its interval."""
    return number(estimate, unit="rounds")


def count(amount: int) -> str:
    """Return a whole number in groups of thousands, such as ``180,000``."""
    return f"{amount:,}"


def plural(amount: int, noun: str) -> str:
    """Return ``"1 finding"`` or ``"3 findings"``."""
    return f"{amount} {noun}" if amount == 1 else f"{amount} {noun}s"


def listed(words: Sequence[str], *, most: int = 6) -> str:
    """Return words joined by commas, the rest only counted."""
    if len(words) <= most:
        return ", ".join(words)
    return f"{', '.join(words[:most])} and {len(words) - most} more"


def moment(iso: str) -> str:
    """Return an ISO 8601 time readable, to the minute; anything else as it stands."""
    date, separator, rest = iso.partition("T")
    if not separator:
        return iso
    zone = "UTC" if rest.endswith(("Z", "+00:00")) else ""
    if not zone and len(rest) > 5 and rest[-6] in "+-":
        zone = rest[-6:]
    return f"{date} {rest[:5]} {zone}".rstrip()


def one_line(text: str) -> str:
    """Return text without line breaks or control characters, for logs that people read."""
    return " ".join("".join(c if c.isprintable() else " " for c in text).split())


def wrapped(label: str, text: str, *, width: int, indent: int, most: int) -> list[str]:
    """Return a labelled paragraph of at most `most` lines; what does not fit ends in "...".

    No line is longer than `width`: words longer than a line are broken.
    """
    room = width - indent
    lines = textwrap.wrap(one_line(text), width=room, break_on_hyphens=False) or [""]
    if len(lines) > most:
        last = textwrap.shorten(" ".join(lines[most - 1 :]), width=room, placeholder=" ...")
        lines = [*lines[: most - 1], last]
    heads = [one_line(label)[: indent - 1].ljust(indent), *[" " * indent] * (len(lines) - 1)]
    return [f"{head}{line}".rstrip() for head, line in zip(heads, lines, strict=True)]
