"""The `readout` section of the configuration."""

from __future__ import annotations

from leakpipe.config.base import Section


class ReadoutSettings(Section):
    """How readout traces become states and leaked populations."""
