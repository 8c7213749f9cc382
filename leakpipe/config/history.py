"""The `history` section of the configuration."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from leakpipe.config.base import Section


class LimitSettings(Section):
    """Levels that are worth a finding whatever they were before."""

    steady_leakage: Annotated[float, Field(gt=0, lt=1)] | None = None
    """Steady leaked population of one qubit, a fraction; by default no limit."""
    leakage_share: Annotated[float, Field(gt=0, lt=1)] | None = None
    """Leakage's share of the logical error per round, a fraction; by default no limit."""
    jump: Annotated[float, Field(gt=1)] = 2.0
    """Factor by which a steady population may differ from the epoch before, beyond noise."""


class HistorySettings(Section):
    """What counts as a change, and when a recording counts as complete."""

    limits: LimitSettings = LimitSettings()
    """Levels and jumps that raise a finding."""
    act_ratio: Annotated[float, Field(gt=1)] = 1.5
    """A change upwards by at least this factor asks to act, a smaller one to watch."""
    quiet_seconds: Annotated[float, Field(ge=0)] = 60.0
    """A recording that changed less than this long ago is still being written: next pass."""
