"""The joint model of a patch, from labelled data to estimates per role."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.config.rates import RatesSettings
from leakpipe.estimates import Estimate, read, store
from leakpipe.findings import Finding, Severity
from leakpipe.rates.curves import Curves
from leakpipe.rates.joint import Curve, JointFit, fit_joint
from leakpipe.rates.reported import FREEDOM
from leakpipe.rates.roles import ROLES, Role

FEWEST = 3
"""Points of a curve below which it holds no rate."""
DISAGREE = 4.0
"""Joint standard errors by which the two ways to a steady level may differ. Wider than usual: they
share their data, and the joint model takes one memory for all qubits of a role."""
BASIS = "joint model of rise, leaked readings and closing readout"

FloatArray = NDArray[np.float64]


def joint_model(readout: xr.Dataset, curves: Curves, settings: RatesSettings) -> JointFit | None:
    """Fit the joint model to the means over the qubits; None without a usable leaked reading."""
    observed: dict[str, Curve] = {}
    plain = readout["injected"].values == 0
    for role, found in (("data", _closing(readout, plain)), ("measure", _rounds(readout, plain))):
        if found is not None:
            observed[role] = found
    if not observed:
        return None
    detected = _detection(curves)
    if detected is not None:
        observed["detection"] = detected
    words: dict[str, Any] = {
        str(name): one.model_dump(exclude_none=True) for name, one in settings.parameters.items()
    }
    return fit_joint(observed, words)


def _usable(readout: xr.Dataset, dim: str) -> NDArray[np.bool_]:
    return np.asarray(readout.sel(qubit=readout[dim].values)["usable"].values, dtype=bool)


def _closing(readout: xr.Dataset, plain: NDArray[np.bool_]) -> Curve | None:
    good = _usable(readout, "data")
    if not good.any() or plain.sum() < FEWEST:
        return None
    value = readout["closing_leaked"].values[plain][:, good]
    shot = readout["closing_leaked_shot_error"].values[plain][:, good]
    shared = readout["closing_leaked_calibration_error"].values[plain][:, good]
    error = np.sqrt((shot**2 + shared**2).sum(axis=1)) / good.sum()
    return _curve(readout["rounds"].values[plain].astype(float), value.mean(axis=1), error)


def _rounds(readout: xr.Dataset, plain: NDArray[np.bool_]) -> Curve | None:
    good = _usable(readout, "measure")
    if not good.any() or not plain.any():
        return None
    shots = readout["shots"].values[plain].astype(float)[:, None]
    value = readout["leaked"].values[plain][:, :, good].mean(axis=2)
    batches = readout["leaked_batch"].values[plain][:, :, :, good].mean(axis=3)
    weight = np.where(np.isfinite(value), shots, 0.0)
    total = weight.sum(axis=0)
    mean = np.nansum(value * weight, axis=0) / np.maximum(total, 1.0)
    # Batches of one recording, summed over recordings: leakage of one shot lasts for rounds.
    there = np.isfinite(batches)
    count = there.sum(axis=1)
    centre = np.where(there, batches, 0.0).sum(axis=1) / np.maximum(count, 1)
    square = np.where(there, batches - centre[:, None], 0.0) ** 2
    spread = square.sum(axis=1) / np.maximum(count - 1, 1) / np.maximum(count, 1)
    error = np.sqrt(np.nansum(spread * weight**2, axis=0)) / np.maximum(total, 1.0)
    return _curve(np.arange(1.0, len(mean) + 1), mean, error)


def _detection(curves: Curves) -> Curve | None:
    events, trials = curves.events.sum(axis=2), curves.trials.sum(axis=2)
    total = trials.sum(axis=0)
    if len(total) < FEWEST or np.any(total == 0):
        return None
    mean = events.sum(axis=0) / total
    batches = len(events)
    deviation = (events - trials * mean) / total
    error = np.sqrt((deviation**2).sum(axis=0) * batches / (batches - 1))
    return _curve(curves.rounds, mean, error)


def _curve(rounds: FloatArray, value: FloatArray, error: FloatArray) -> Curve | None:
    keep = np.isfinite(value) & np.isfinite(error) & (error > 0)
    if keep.sum() < FEWEST:
        return None
    return Curve(rounds[keep], value[keep], error[keep])


def joint_estimates(joint: JointFit | None) -> dict[str, Any]:
    """Return the joint model's estimates per role, and its verdict and goodness of fit."""
    named = {
        f"joint_{name}": [_estimate(joint, name, role) for role in ROLES]
        for name in ("steady_leakage", "injection", "seepage")
    }
    out: dict[str, Any] = {}
    for name, values in named.items():
        out |= store(name, ("role",), values, units="1" if "steady" in name else "per round")
    out["joint_verdict"] = ((), "no leaked readings" if joint is None else joint.verdict)
    out["joint_chi_square"] = ((), np.nan if joint is None else joint.chi_square, {"units": "1"})
    out["joint_freedom"] = ((), 0 if joint is None else joint.freedom, {"units": "1"})
    return out


def roles_by_joint(
    variables: Mapping[str, Any], joint: JointFit | None, asked: Sequence[str]
) -> dict[str, Any]:
    """Return the reported estimates per role with those of the asked roles from the joint model.

    Asked for by the config, or where single qubits have not settled and their mean says nothing.
    """
    out: dict[str, Any] = {}
    for name in ("steady_leakage", "injection", "seepage"):
        units = "1" if "steady" in name else "per round"
        fitted = xr.Dataset(
            {key: variables[key] for key in store(name, ("role",), [])},
            coords={"role": list(ROLES)},
        )
        values = [
            _estimate(joint, name, role) if role in asked else read(fitted, name, {"role": role})
            for role in ROLES
        ]
        out |= store(name, ("role",), values, units=units)
    return out


def _estimate(joint: JointFit | None, name: str, role: str) -> Estimate:
    if joint is None:
        return Estimate.unknown("no usable leaked readings for the joint model")
    if joint.verdict != "good":
        return Estimate.unknown(f"{BASIS}: {joint.verdict}")
    if name == "steady_leakage":
        value, error = joint.steady(role)
    else:
        value, error = joint.values[f"{name}_{role}"], joint.errors[f"{name}_{role}"]
        if f"{name}_{role}" not in joint.varied:
            return Estimate(value, value, value, basis=f"{BASIS}; held or tied by the config")
    return Estimate.from_error(value, error, BASIS, freedom=FREEDOM)


def joint_findings(joint: JointFit | None, roles: dict[str, Role], asked: bool) -> list[Finding]:
    """Return a finding where the joint model and the fit per qubit disagree, or it failed."""
    if joint is None:
        return []
    if joint.verdict != "good":
        severity: Severity = "watch" if asked else "note"
        sentence = f"The joint model of both roles gave no rates: {joint.verdict}."
        return [Finding("joint-model-failed", severity, "code", sentence)]
    findings = []
    for role in ROLES:
        fit = roles[role].fit
        if fit is None:
            continue
        value, error = joint.steady(role)
        own = float(fit.level.mean())
        spread = float(np.std(np.nanmean(roles[role].levels, axis=1), ddof=1))
        gap = abs(value - own) / float(np.hypot(error, spread))
        if gap > DISAGREE:
            findings.append(
                Finding(
                    "joint-model-disagrees",
                    "watch",
                    f"{role} qubits",
                    f"The joint model puts the {role} qubits' steady level at {value:.2%}, the fit "
                    f"per qubit at {own:.2%} ({gap:.1f} joint standard errors apart).",
                    {"joint": value, "per_qubit": own, "gap": gap},
                )
            )
    return findings
