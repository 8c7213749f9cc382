"""The errors people can cause, each with the exit code its command ends with.

Scientific doubt is not an error: it is a finding (`leakpipe.findings`) and travels with the result.
"""

from __future__ import annotations

from collections.abc import Sequence


class LeakpipeWarning(UserWarning):
    """Something leakpipe itself wants a developer to see; the tests turn it into a failure."""


class LeakpipeError(Exception):
    """Base of every error that leakpipe raises on purpose."""

    exit_code = 1


class ConfigError(LeakpipeError):
    """The configuration, or the way a command was called, cannot be used."""

    exit_code = 2


class RecordingError(LeakpipeError):
    """Recordings are missing, damaged or break the data contract."""

    exit_code = 3


class LayoutError(LeakpipeError):
    """A code layout contradicts itself or does not fit the recordings."""

    exit_code = 3


def numbered(problems: Sequence[str], closing: str) -> str:
    """Return one message that lists every problem on a line of its own, then the closing words.

    Parameters
    ----------
    problems
        One sentence each, without a line break at the end.
    closing
        What follows the count, for example ``"nothing was run"``.
    """
    count = f"{len(problems)} problem{'' if len(problems) == 1 else 's'}, {closing}."
    return "\n".join([*problems, count])
