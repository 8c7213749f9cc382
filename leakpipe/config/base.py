"""Base of every config section: frozen, strict, no unknown keys."""

from __future__ import annotations

from pydantic import BaseModel, ConfigDict


class Section(BaseModel):
    """A part of the configuration. Field descriptions are shown in errors and the JSON Schema."""

    model_config = ConfigDict(
        frozen=True,
        strict=True,
        extra="forbid",
        allow_inf_nan=False,
        use_attribute_docstrings=True,
    )
