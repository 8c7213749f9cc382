"""The `detection` section of the configuration."""

from __future__ import annotations

from leakpipe.config.base import Section


class DetectionSettings(Section):
    """How detection events are counted."""
