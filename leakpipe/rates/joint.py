"""Joint model of a patch: rise, leaked readings and closing readout with one set of rates per role.

lmfit carries it, so that parameters can be fixed, bounded or tied from the config. Errors are
absolute (no rescaling by chi-square: that made them 20 % too small in the prototypes) and the
verdict is our own: a fit that reports success with a parameter on its bound is no success.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from leakpipe.rates.recurrence import accumulated, steady_level

FloatArray = NDArray[np.float64]

PARAMETERS = (
    "injection_data",
    "seepage_data",
    "injection_measure",
    "seepage_measure",
    "detection_start",
    "detection_response",
)
NEAR_BOUND = 1e-3
"""Distance from a bound, relative to the range, that counts as on it."""


@dataclass(frozen=True)
class Curve:
    """One observed curve: rounds gone by, value and standard error, each (n,)."""

    rounds: FloatArray
    value: FloatArray
    error: FloatArray


@dataclass(frozen=True)
class JointFit:
    """Outcome of the joint fit.

    Attributes
    ----------
    values, errors
        Per parameter; an error is NaN where lmfit could not give one or the parameter was fixed.
    covariance
        Of the varied parameters, in the order of `varied`.
    varied
        Names of the varied parameters.
    chi_square, freedom
        Goodness of fit.
    verdict
        "good", or why the numbers are not to be used.
    report
        lmfit's own text.
    """

    values: Mapping[str, float]
    errors: Mapping[str, float]
    covariance: FloatArray
    varied: tuple[str, ...]
    chi_square: float
    freedom: int
    verdict: str
    report: str

    def steady(self, role: str) -> tuple[float, float]:
        """Return p_ss of a role and its standard error, by the delta method."""
        g, s = self.values[f"injection_{role}"], self.values[f"seepage_{role}"]
        level = float(steady_level(g, s))
        slope = np.zeros(len(self.varied))
        for name, part in (("injection", s / (g + s) ** 2), ("seepage", -g / (g + s) ** 2)):
            if f"{name}_{role}" in self.varied:
                slope[self.varied.index(f"{name}_{role}")] = part
        return level, float(np.sqrt(slope @ self.covariance @ slope))


def model(rounds: FloatArray, values: Mapping[str, float], curve: str) -> FloatArray:
    """Return the predicted curve.

    Parameters
    ----------
    rounds
        Rounds gone by.
    values
        Parameter values.
    curve
        "data" or "measure" (leaked population, mean over the role's qubits), or "detection" (mean
        detection probability: start plus response times the mean leaked population of both roles).
    """
    populations = [
        accumulated(values[f"injection_{role}"], values[f"seepage_{role}"], rounds)
        for role in ("data", "measure")
    ]
    if curve == "data":
        return populations[0]
    if curve == "measure":
        return populations[1]
    mean = (populations[0] + populations[1]) / 2
    return np.asarray(values["detection_start"] + values["detection_response"] * mean)


def fit_joint(curves: Mapping[str, Curve], settings: Mapping[str, Mapping[str, Any]]) -> JointFit:
    """Fit the joint model.

    Parameters
    ----------
    curves
        Any of "data", "measure", "detection"; parameters of a missing role are fixed at 0 leakage.
    settings
        Per parameter what the config says of it: value, vary, min, max, expr (lmfit's words).

    Raises
    ------
    KeyError
        The config names a parameter that the model does not have.
    """
    import lmfit

    unknown = set(settings) - set(PARAMETERS)
    if unknown:
        raise KeyError(f"no such parameter: {', '.join(sorted(unknown))}")
    parameters = lmfit.Parameters()
    for role in ("data", "measure"):
        there = role in curves
        late = float(np.mean(curves[role].value[-3:])) if there else 0.0
        start = max(late, 1e-5) * 0.2
        parameters.add(
            f"injection_{role}", value=start if there else 0.0, min=0.0, max=0.5, vary=there
        )
        parameters.add(f"seepage_{role}", value=0.2, min=1e-4, max=1.0, vary=there)
    seen = "detection" in curves
    first = float(curves["detection"].value[0]) if seen else 0.1
    parameters.add("detection_start", value=first, min=0.0, max=0.5, vary=seen)
    parameters.add("detection_response", value=1.0, min=-50.0, max=50.0, vary=seen)
    for name, words in settings.items():
        parameters[name].set(**words)

    def residual(now: Any) -> FloatArray:
        values = now.valuesdict()
        parts = [
            (model(one.rounds, values, name) - one.value) / one.error
            for name, one in curves.items()
        ]
        return np.concatenate(parts)

    found = lmfit.minimize(residual, parameters, scale_covar=False)
    varied = tuple(found.var_names)
    covariance = (
        np.asarray(found.covar)
        if found.errorbars and found.covar is not None
        else np.full((len(varied), len(varied)), np.nan)
    )
    return JointFit(
        values=found.params.valuesdict(),
        errors={
            name: float("nan") if one.stderr is None else float(one.stderr)
            for name, one in found.params.items()
        },
        covariance=covariance,
        varied=varied,
        chi_square=float(found.chisqr),
        freedom=int(found.nfree),
        verdict=_verdict(found),
        report=lmfit.fit_report(found),
    )


def _verdict(found: Any) -> str:
    """Judge a fit ourselves."""
    if not found.success:
        return f"the fit did not end: {found.message}"
    for name in found.var_names:
        one = found.params[name]
        reach = one.max - one.min
        near = min(one.value - one.min, one.max - one.value) < NEAR_BOUND * reach
        if near and not name.startswith("injection"):
            return f"{name} ended on its bound ({one.value:.4g})"
    if not found.errorbars:
        return "no errors could be estimated"
    return "good"
