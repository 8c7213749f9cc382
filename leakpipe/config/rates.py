"""The `rates` section of the configuration."""

from __future__ import annotations

from leakpipe.config.base import Section


class RatesSettings(Section):
    """How injection and seepage are fitted."""
