"""The contract "1" of `summary.json` as models: validated before it is written, schema from them.

Other programs read this file. Names and meanings stay; anything new needs a new contract number.
"""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field

CONTRACT = "1"

Number = Annotated[float, Field(allow_inf_nan=False)]


class _Part(BaseModel):
    model_config = ConfigDict(
        frozen=True, strict=True, extra="forbid", use_attribute_docstrings=True
    )


class EstimatePart(_Part):
    """A number with its interval, or the statement that the data cannot tell."""

    value: Number | None
    """Null where the data do not determine it."""
    low: Number | None
    """Lower end of the interval, or a lower limit."""
    high: Number | None
    """Upper end of the interval, or an upper limit."""
    level: Annotated[float, Field(gt=0, lt=1)]
    """Confidence level of the interval."""
    identifiable: bool
    """False where the data do not determine the value."""
    basis: str
    """Which data the number rests on; the reason where it is not identifiable."""


class ByRole(_Part):
    """The same quantity for data and for measure qubits."""

    data: EstimatePart
    measure: EstimatePart


class QubitPart(_Part):
    """One qubit. Fractions, rates per round, settling times in rounds."""

    qubit: str
    role: Literal["data", "measure"]
    steady_leakage: EstimatePart
    injection: EstimatePart
    seepage: EstimatePart
    settling_rounds: EstimatePart
    assignment: EstimatePart | None
    """Mean probability of a right reading over the two computational start states."""


class PatchPart(_Part):
    """One patch and basis."""

    patch: str
    family: str
    distance: int
    basis: Literal["Z", "X"]
    shots: int
    rounds: list[int]
    """The different numbers of rounds R of the memory recordings."""
    logical_error_per_round: EstimatePart
    leakage_share: EstimatePart
    """Leakage's part of the logical error per round, a fraction."""
    share_routes: dict[str, EstimatePart]
    detection_rise: EstimatePart
    """Relative rise of the detection probability, steady level over start minus one."""
    settling_rounds: EstimatePart
    kappa: EstimatePart
    """Covariance strength over rise strength: about 1 for leakage, 0 for heating."""
    steady_leakage: ByRole
    injection: ByRole
    seepage: ByRole
    qubits: list[QubitPart]


class FindingPart(_Part):
    """A stated doubt or flag."""

    code: str
    severity: Literal["note", "watch", "act"]
    where: str
    sentence: str
    numbers: dict[str, Number | int | str | None]


class SummaryPart(_Part):
    """Summary of one epoch. Fractions, not percent; rounds, not seconds."""

    contract: Literal["1"]
    device: str
    calibration_id: str
    acquired_at: str
    made_at: str
    patches: list[PatchPart]
    findings: list[FindingPart]


def schema() -> dict[str, Any]:
    """Return the JSON Schema of `summary.json`, as kept in shared/summary.schema.json."""
    found = SummaryPart.model_json_schema()
    return {"$schema": "https://json-schema.org/draft/2020-12/schema", **found}


def validated(summary: dict[str, Any]) -> dict[str, Any]:
    """Return the summary unchanged if it keeps the contract.

    Raises
    ------
    pydantic.ValidationError
        It does not; every deviation is listed. That is a fault of leakpipe, never of a recording.
    """
    SummaryPart.model_validate(summary)
    return summary
