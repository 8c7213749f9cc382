"""The readout model: one fitted mixture per qubit, from the newest calibration that has it."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.config.readout import ReadoutSettings
from leakpipe.errors import RecordingError, numbered
from leakpipe.findings import Finding, with_findings
from leakpipe.readout.calibration import QubitModel, model_qubit, tail_names
from leakpipe.readout.mixture import Mixture
from leakpipe.readout.population import WORKING_PRIOR
from leakpipe.readout.weights import integrate, learn_weights

STATE_NAMES = [0, 1, 2]
OVERLAP_WATCH = 3.0
"""Standard error over that of a perfect readout that becomes a finding (prototype study)."""
MISSING_WATCH = 1e-3
"""Fraction of missing readings that becomes a finding (common practice, no source)."""
FEWEST_SHOTS = 100
"""Finite shots per preparation below which no class can be fitted."""


def calibrate(
    calibrations: Sequence[xr.Dataset], settings: ReadoutSettings, seed: int
) -> xr.Dataset:
    """Fit a readout model per qubit.

    Parameters
    ----------
    calibrations
        Calibration recordings, newest last; a qubit comes from the newest that has it.
    settings
        The `readout` section.
    seed
        Seed of the bootstrap; each qubit has a stream of its own.

    Returns
    -------
    model
        Over dimension `qubit`; reused by later epochs.

    Raises
    ------
    RecordingError
        A qubit has too few finite shots in a preparation to fit a class.
    """
    newest: dict[str, xr.Dataset] = {}
    for calibration in calibrations:
        for name in calibration["qubit"].values:
            newest[str(name)] = calibration
    names = sorted(newest)
    streams = np.random.default_rng(seed).spawn(len(names))
    models, weights, problems = [], [], []
    for name, stream in zip(names, streams, strict=True):
        prepared = [int(state) for state in newest[name]["prepared"].values]
        points, weight = _points(newest[name].sel(qubit=name), settings)
        few = [
            f'{newest[name].attrs["source"]}  qubit "{name}": preparation {state} has '
            f"{int(np.isfinite(x).all(axis=1).sum())} finite shots, expected {FEWEST_SHOTS} or more"
            for state, x in zip(prepared, points, strict=True)
            if np.isfinite(x).all(axis=1).sum() < FEWEST_SHOTS
        ]
        problems += few
        if not few:
            models.append(
                model_qubit(
                    points,
                    prepared,
                    stream,
                    replicas=settings.replicas,
                    decay=settings.decay == "fitted",
                )
            )
            weights.append(weight)
    if problems:
        raise RecordingError(numbered(problems, "nothing was run"))
    model = _label(names, models, weights)
    model["calibration_id"] = ("qubit", [newest[n].attrs["calibration_id"] for n in names])
    current = calibrations[-1].attrs["calibration_id"]
    return with_findings(model, _model_findings(model, models, current))


def _points(
    calibration: xr.Dataset, settings: ReadoutSettings
) -> tuple[list[NDArray[np.float64]], NDArray[np.float64] | None]:
    if "iq" in calibration:
        values = calibration["iq"].values
        return [values[p].astype(np.float64) for p in range(len(values))], None
    traces = [calibration["trace"].values[p] for p in range(calibration.sizes["prepared"])]
    weight = learn_weights(traces, settings.weights)
    points = [
        integrate(x[:, None], weight[None].astype(np.float32))[:, 0].astype(np.float64)
        for x in traces
    ]
    return points, weight


def _label(
    names: list[str], models: list[QubitModel], weights: list[NDArray[np.float64] | None]
) -> xr.Dataset:
    def stack(get: Any) -> NDArray[Any]:
        return np.array([get(one) for one in models])

    preparations = max(len(one.shots) for one in models)

    def padded(get: Any) -> NDArray[np.float64]:
        out = np.full((len(models), preparations, *np.shape(get(models[0]))[1:]), np.nan)
        for row, one in enumerate(models):
            out[row, : len(get(one))] = get(one)
        return out

    variables: dict[str, Any] = {
        "mean": (("qubit", "state", "feature"), stack(lambda m: m.mixture.means)),
        "covariance": (
            ("qubit", "feature", "feature_2"),
            stack(lambda m: m.mixture.covariance),
        ),
        "preparation_weight": (("qubit", "prepared", "state"), padded(lambda m: m.mixture.weights)),
        "background_weight": (("qubit", "prepared"), padded(lambda m: m.mixture.background)),
        "decay": (("qubit", "tail"), stack(lambda m: m.mixture.decay)),
        "box": (("qubit", "feature", "end"), stack(lambda m: m.mixture.box)),
        "likelihood": ("qubit", stack(lambda m: m.mixture.likelihood)),
        "converged": ("qubit", stack(lambda m: np.int8(m.mixture.converged))),
        "response": (("qubit", "start", "class"), stack(lambda m: m.response)),
        "response_replica": (("qubit", "replica", "start", "class"), stack(lambda m: m.replicas)),
        "assignment": (("qubit", "state", "label"), stack(lambda m: m.labels)),
        "assignment_as_prepared": (("qubit", "prepared", "label"), padded(lambda m: m.as_prepared)),
        "shots": (("qubit", "prepared"), padded(lambda m: m.shots)),
        "missing": ("qubit", stack(lambda m: m.missing)),
        "separation": (("qubit", "pair_of_states"), stack(lambda m: m.separations)),
        "error_ratio": ("qubit", stack(lambda m: m.error_ratio)),
        "usable": ("qubit", stack(lambda m: np.int8(m.usable))),
        "usable_reason": ("qubit", stack(lambda m: m.reason)),
    }
    if weights[0] is not None:
        variables["integration"] = (
            ("qubit", "sample", "quadrature", "feature"),
            np.array(weights),
        )
    return xr.Dataset(
        variables,
        coords={
            "qubit": names,
            "state": STATE_NAMES,
            "label": STATE_NAMES,
            "prepared": np.arange(preparations),
            "tail": tail_names(),
            "class": ["0", "1", "2", "background"],
            "pair_of_states": ["0-1", "1-2", "0-2"],
        },
        attrs={"working_prior": json_prior()},
    )


def json_prior() -> str:
    """Return the working prior as text, for the model file."""
    return " ".join(str(value) for value in WORKING_PRIOR)


def _model_findings(model: xr.Dataset, models: list[QubitModel], current: str) -> list[Finding]:
    findings = []
    older = [
        f"{q} ({c})"
        for q, c in zip(
            model["qubit"].values.tolist(), model["calibration_id"].values.tolist(), strict=True
        )
        if c != current
    ]
    if older:
        findings.append(
            Finding(
                "older-calibration",
                "note",
                ", ".join(older),
                f"{len(older)} qubits are not in the newest calibration and use an older one: "
                f"{', '.join(older)}.",
            )
        )
    for name, one in zip(model["qubit"].values.tolist(), models, strict=True):
        if not one.usable:
            findings.append(
                Finding("leak-not-identifiable", "watch", name, f"{name}: {one.reason}.")
            )
        elif one.error_ratio > OVERLAP_WATCH:
            findings.append(
                Finding(
                    "readout-overlap",
                    "watch",
                    name,
                    f"{name}: overlapping readout classes widen the error of its leaked "
                    f"population {one.error_ratio:.1f} times.",
                    {"error_ratio": one.error_ratio},
                )
            )
        if one.missing > MISSING_WATCH:
            findings.append(
                Finding(
                    "missing-readings",
                    "watch",
                    name,
                    f"{name}: {one.missing:.2%} of its calibration shots are missing.",
                    {"fraction": one.missing},
                )
            )
        if not one.mixture.converged:
            findings.append(
                Finding(
                    "readout-fit-unfinished",
                    "watch",
                    name,
                    f"{name}: its mixture did not converge.",
                )
            )
    return findings


def mixture_of(model: xr.Dataset) -> Mixture:
    """Return the mixture of one qubit of a readout model."""
    weights = model["preparation_weight"].values
    return Mixture(
        means=model["mean"].values,
        covariance=model["covariance"].values,
        weights=weights,
        decay=model["decay"].values,
        background=model["background_weight"].values,
        box=model["box"].values,
        likelihood=float(model["likelihood"]),
        steps=0,
        converged=bool(model["converged"]),
    )
