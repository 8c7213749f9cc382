"""Durations as people write them: 90s, 15m, 1h30m."""

from __future__ import annotations

import re

from leakpipe.errors import ConfigError

SECONDS = {"s": 1, "m": 60, "h": 3600, "d": 86400}
_WHOLE = re.compile(r"(?:\d+(?:\.\d+)?[smhd])+")
_PART = re.compile(r"(\d+(?:\.\d+)?)([smhd])")


def seconds(text: str) -> float:
    """Return a duration in seconds.

    Parameters
    ----------
    text
        Numbers with the units s, m, h or d, largest first, such as ``"15m"`` or ``"1h30m"``.

    Raises
    ------
    ConfigError
        The text is no duration, repeats or misorders its units, or is zero.
    """
    plain = text.strip()
    parts = _PART.findall(plain)
    if not _WHOLE.fullmatch(plain):
        hint = f'; did you mean "{plain}m"?' if re.fullmatch(r"\d+", plain) else ""
        raise ConfigError(f"must be a duration such as 90s, 15m or 1h30m, got {text!r}{hint}")
    sizes = [SECONDS[unit] for _, unit in parts]
    if sizes != sorted(set(sizes), reverse=True):
        raise ConfigError(f"must have each unit once, largest first, as in 1h30m, got {text!r}")
    total = sum(float(number) * size for (number, _), size in zip(parts, sizes, strict=True))
    if total <= 0:
        raise ConfigError(f"must be longer than zero, got {text!r}")
    return total
