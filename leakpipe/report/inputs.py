"""What the report is made from: one patch and basis, its stages' datasets and their origin."""

from __future__ import annotations

from collections.abc import Hashable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import xarray as xr

from leakpipe.codes.layout import Basis, Layout
from leakpipe.estimates import Estimate, read
from leakpipe.findings import Finding, findings_of

STAGES = ("model", "readout", "detection", "rates", "logical", "share")
"""Names under which a patch's datasets are looked up; any of them may be missing."""


@dataclass(frozen=True)
class PatchReport:
    """One patch and basis of one epoch, ready to be reported.

    Attributes
    ----------
    device, calibration_id
        From the recordings' attributes.
    acquired_at, made_at
        When the recordings were taken and when this result was made, ISO 8601 with zone.
    patch, family, distance, basis
        Which code instance, and the basis of its memory runs.
    shots
        Shots of all recordings together.
    rounds
        The different numbers of rounds R, ascending.
    layout
        The code layout; its names are the names of the recordings.
    stages
        Stage name (`STAGES`) to dataset, as docs/architecture.md lists them.
    config_text
        The YAML text that was run.
    input_hashes, versions
        File name to content hash, package name to version.
    seed
        The config's one seed.
    findings
        Doubts that belong to no stage, such as a readout model taken from an older calibration.
    points
        Optional subsample of calibration points for the clouds, ``iq(qubit, prepared, point,
        quadrature)`` in the same units as the readout model's means.
    """

    device: str
    calibration_id: str
    acquired_at: str
    made_at: str
    patch: str
    family: str
    distance: int
    basis: Basis
    shots: int
    rounds: tuple[int, ...]
    layout: Layout
    stages: Mapping[str, xr.Dataset]
    config_text: str = ""
    input_hashes: Mapping[str, str] = field(default_factory=dict)
    versions: Mapping[str, str] = field(default_factory=dict)
    seed: int | None = None
    findings: tuple[Finding, ...] = ()
    points: xr.Dataset | None = None

    @property
    def label(self) -> str:
        """The patch and basis in words, for headings and for findings of several patches."""
        return f"{self.patch} {self.basis}"

    def stage(self, name: str) -> xr.Dataset | None:
        """Return a stage's dataset, or None where the stage has no result."""
        return self.stages.get(name)

    def array(
        self, stage: str, name: str, dims: tuple[str, ...]
    ) -> np.ndarray[Any, np.dtype[np.float64]] | None:
        """Return a variable as float64 in the asked order of dimensions, or None.

        None means that the stage or the variable is missing or has other dimensions: a figure then
        says so instead of failing, because one odd stage must not cost the whole report.
        """
        data = self.stage(stage)
        if data is None or name not in data or set(data[name].dims) != set(dims):
            return None
        return np.asarray(data[name].transpose(*dims).values, dtype=np.float64)

    def labels(self, stage: str, name: str) -> list[Any]:
        """Return the values of a coordinate or label variable as plain Python; empty if none."""
        data = self.stage(stage)
        return [] if data is None or name not in data.variables else data[name].values.tolist()

    def rows_of_model(self) -> tuple[list[str], list[int]]:
        """Return the layout's qubits that the readout model has, and their rows in it."""
        names = [str(name) for name in self.labels("model", "qubit")]
        qubits = [q for q in (*self.layout.data, *self.layout.measure) if q in names]
        return qubits, [names.index(qubit) for qubit in qubits]

    def estimate(
        self, stage: str, name: str, where: Mapping[str, Hashable] | None = None
    ) -> Estimate:
        """Return one estimate, or an unknown one that says which part is missing."""
        data = self.stage(stage)
        if data is None:
            return Estimate.unknown(f"no result of the {stage} stage")
        try:
            found = read(data, name, where)
        except (KeyError, ValueError):
            place = "".join(f" for {value}" for value in (where or {}).values())
            return Estimate.unknown(f"not reported by the {stage} stage{place}")
        return _without_contradiction(found)

    def by_role(self, stage: str, name: str, role: str) -> Estimate:
        """Return the estimate for all "data" or all "measure" qubits.

        The dimension is called ``role_name`` in a dataset whose ``role`` says what each qubit is.
        """
        data = self.stage(stage)
        dims = () if data is None or name not in data else data[name].dims
        return self.estimate(stage, name, {"role_name" if "role_name" in dims else "role": role})

    def all_findings(self) -> list[Finding]:
        """Return the findings of the patch and of its stages, in the order of the pipeline."""
        stages = [data for name in STAGES if (data := self.stage(name)) is not None]
        return [*self.findings, *(finding for stage in stages for finding in findings_of(stage))]


def _without_contradiction(found: Estimate) -> Estimate:
    """Keep the convention that a value is null exactly where the data cannot tell.

    The bounds stay: they carry the upper and lower limits.
    """
    if found.identifiable and found.value is not None:
        return found
    reason = found.basis or "the data do not determine it"
    return Estimate(None, found.low, found.high, found.level, False, reason)
