"""The `logical` section of the configuration."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from leakpipe.config.base import Section


class LogicalSettings(Section):
    """How the logical error per round is estimated."""

    decoder: Literal["verdict", "matching"] = "verdict"
    """Whose outcome counts: the recording's verdict where it has one, or always our matching."""
    first_round: Annotated[int, Field(ge=1)] = 2
    """Recordings with fewer rounds are left out of the fit: one round has no error history
    (common practice, no source)."""
