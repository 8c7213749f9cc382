"""The `share` section of the configuration."""

from __future__ import annotations

from leakpipe.config.base import Section


class ShareSettings(Section):
    """How leakage's share of the logical error is estimated."""
