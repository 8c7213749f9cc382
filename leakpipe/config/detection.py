"""The `detection` section of the configuration."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from leakpipe.config.base import Section


class DetectionSettings(Section):
    """How detection events are counted."""

    leaked_reads: Annotated[int, Field(ge=0, le=1)] = 1
    """The bit that a leaked reading enters a parity with."""
