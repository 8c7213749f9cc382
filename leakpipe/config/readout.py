"""The `readout` section of the configuration."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from leakpipe.config.base import Section


class ReadoutSettings(Section):
    """How readout points or traces become states and leaked populations."""

    weights: Literal["discriminant", "matched filter", "boxcar"] = "discriminant"
    """Integration weights learned from traces; points given as `iq` pass through."""
    decay: Literal["fitted", "none"] = "fitted"
    """Whether decay during the readout (1 to 0, 2 to 1) gives the classes tails."""
    replicas: Annotated[int, Field(ge=2)] = 10
    """Bootstrap copies of the calibration that carry its error into every later number."""
    adapt: bool = True
    """Whether rotation, gain and offset are refitted to a run that has drifted."""
    refuse_misfit: Annotated[float, Field(gt=0)] = 1e-2
    """Excess chi-square per shot above which a run that was not mended is not used for leakage."""
