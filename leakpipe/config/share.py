"""The `share` section of the configuration."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from leakpipe.config.base import Section


class ShareSettings(Section):
    """How leakage's share of the logical error is estimated."""

    twin: bool = True
    """Whether the fitted device is simulated with and without injection as a second route."""
    twin_shots: Annotated[int, Field(ge=1000)] = 40_000
    """Simulated shots per number of rounds of the twin."""
