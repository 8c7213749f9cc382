"""The `rates` section of the configuration."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from leakpipe.config.base import Section


class ParameterSettings(Section):
    """What is said beforehand of one parameter of the joint model."""

    value: float | None = None
    """Starting value, or the value it is held at."""
    vary: bool | None = None
    """False holds the parameter at its value."""
    min: float | None = None
    """Lower bound."""
    max: float | None = None
    """Upper bound."""
    expr: str | None = None
    """Ties it to others, such as "injection_data"."""


class RatesSettings(Section):
    """How injection and seepage are fitted."""

    boundary_rounds: Annotated[int, Field(ge=1)] = 1
    """Rounds at the start whose detection layers are never fitted (layer 1 at least)."""
    observation: Literal["outcome random", "detector random"] = "outcome random"
    """What a leaked neighbour randomises: a check's outcome (circuits with reset), or its
    detection events."""
    parameters: dict[
        Literal[
            "injection_data",
            "seepage_data",
            "injection_measure",
            "seepage_measure",
            "detection_start",
            "detection_response",
        ],
        ParameterSettings,
    ] = Field(default_factory=dict)
    """Parameters of the joint model that are fixed, bounded or tied. With any, the rates per role
    come from the joint model; without, it is a cross-check of the fit per qubit."""
    draws: Annotated[int, Field(ge=100)] = 400
    """Random draws of the fitted rates that later stages carry as their errors."""
    readout_excitation: Annotated[float, Field(ge=0, lt=0.1)] | None = None
    """How large the probability to go from 1 to 2 during the readout may be; it looks like leakage
    and no fit can tell, so it widens every leaked population. By default a twentieth of the fitted
    decay from 1 to 0, and 5e-4 at least."""
