"""The `logical` section of the configuration."""

from __future__ import annotations

from leakpipe.config.base import Section


class LogicalSettings(Section):
    """How the logical error per round is estimated."""
