"""The `history` section of the configuration."""

from __future__ import annotations

from leakpipe.config.base import Section


class HistorySettings(Section):
    """Where the history is kept and what counts as a change."""
