"""The `report` section of the configuration."""

from __future__ import annotations

from leakpipe.config.base import Section


class ReportSettings(Section):
    """What the report shows."""
