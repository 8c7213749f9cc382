"""The network of a patch, from labelled detection sums to levels per qubit without their readout."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.codes.layout import Layout
from leakpipe.config.rates import RatesSettings
from leakpipe.estimates import Estimate, store
from leakpipe.findings import Finding
from leakpipe.rates.correlation import FIRST_LAG
from leakpipe.rates.curves import CORRELATED, GATES_AHEAD, Curves, extra_layers
from leakpipe.rates.directions import Directions, directions
from leakpipe.rates.moments import PairMoments, pair_moments
from leakpipe.rates.network import Means, NetworkFit, fit_network
from leakpipe.rates.pictures import Preference, prefer, visible
from leakpipe.rates.visibility import Visibility, pair_design, visibility

FEWEST_LAYERS = 4
"""Interior layers below which no lag of 2 has a partner to be compared with."""
START_TAU = 5.0
"""Rounds; where the search starts when neither rise nor correlations say (common practice)."""
SHARE_DEVIATION = 0.29
"""Of the part of a round's injection that its gates see, if it could be anything from 0 to 1."""
QUBIT_ERROR = 0.10
"""Relative model error of each level: the order of gates, leaks in mid-round and qubits that return
are averaged over (levels of rehearsed memories of 100 000 shots scattered by 5 to 10 % beyond their
errors)."""
TAU_ERROR = 0.04
"""Relative model error of settling times: rehearsed memories of 60 000 to 100 000 shots gave .95 to
1.04 of the true one."""
KAPPA_ERROR = 0.06
"""Relative model error of kappa: 1 / kappa came out .99 to 1.14 in rehearsed memories whose leaked
qubits randomise fully."""
MISFIT = 2.0
"""Chi-square per degree of freedom above which no picture fits and levels are not quoted (ours)."""
OWN_HALF = 0.5
"""Part of its own data in a settling time below which it is said to be shared (ours)."""
T49 = 2.0096
"""97.5 % quantile of Student's t with 49 degrees of freedom (50 batches)."""

FloatArray = NDArray[Any]


@dataclass(frozen=True)
class Networked:
    """What correlations and means say about every qubit.

    Attributes
    ----------
    names
        Qubits, data then measure.
    told
        (qubit,) True where the level is determined.
    level, log_tau
        (qubit,) NaN where not.
    covariance
        (2 qubit, 2 qubit) of both, model errors included; NaN rows where not told.
    own
        (qubit,) part of ln tau that comes from the qubit's own data.
    fit, preference, design, significance
        What they come from; z of the summed covariance.
    reason
        Why there are no levels; empty if there are.
    observation_shift
        Relative change of the mean level under the other observation model.
    """

    names: tuple[str, ...]
    told: NDArray[np.bool_]
    level: FloatArray
    log_tau: FloatArray
    covariance: FloatArray
    own: FloatArray
    fit: NetworkFit | None
    preference: Preference | None
    design: Directions | None
    significance: float
    reason: str
    observation_shift: float

    @property
    def basis(self) -> str:
        """What the numbers rest on."""
        return "correlations of pairs of checks, lags 2 to 8, and the rise of every check"


def network_of(
    detection: xr.Dataset,
    layout: Layout,
    curves: Curves,
    memory: float | None,
    settings: RatesSettings,
) -> Networked:
    """Fit the network of a patch.

    Parameters
    ----------
    detection
        Dataset of the detection stage.
    layout
        Code.
    curves
        Interior detection counts.
    memory
        lam of the code where known.
    settings
        The `rates` section.
    """
    names = (*layout.data, *layout.measure)
    observed = observations(detection, layout, curves, memory)
    if observed is None:
        return _nothing(names, "too few interior rounds for correlations two rounds apart")
    moments, means, probability = observed
    significance = summed_significance(moments)
    if not np.isfinite(significance):
        return _nothing(names, "one batch of shots only: no error of the correlations")
    if significance < CORRELATED:
        reason = f"no correlations two and more rounds apart (z = {significance:.1f})"
        return _nothing(names, reason, significance)
    start = float(np.log(START_TAU if memory is None else -1 / np.log(np.clip(memory, 0.05, 0.98))))
    outcome = settings.observation == "outcome random"
    reset = not extra_layers(detection)
    wanted = None if settings.picture == "from data" else settings.picture
    choice = prefer(layout, moments, probability, start, outcome=outcome, reset=reset, only=wanted)

    def shown(part: float, by_outcome: bool = outcome) -> Visibility:
        return visibility(layout, choice.picture, outcome=by_outcome, depolarise=part, reset=reset)

    here = shown(choice.depolarise)
    design = directions(pair_design(here, moments.first, moments.second))
    told = visible(moments, here) & ~design.undetermined
    seen = visible(moments, here)
    if not told.any():
        reason = "correlations of this code tell no qubit apart"
        return _nothing(names, reason, significance)

    data = np.arange(len(names)) < len(layout.data)
    one_group = np.zeros(int(seen.sum()), dtype=np.int64)

    def fitted(by: Visibility, group: NDArray[np.int64] = one_group) -> NetworkFit:
        return fit_network(moments, means, probability, by.of(seen), start=start, group=group)

    fit, group = fitted(here), one_group
    found = [_seen_together(fit, mask[seen]) for mask in (data, ~data)]
    if all(found):
        # Settling times of data and of measure qubits (which a reset may clean) are not alike.
        group = (~data[seen]).astype(np.int64)
        fit = fitted(here, group)
    else:
        told &= data if found[0] else ~data if found[1] else np.zeros_like(data)
    other = fitted(shown(choice.depolarise, not outcome), group)
    moved = [(other.level - fit.level) / 2]
    if choice.picture == "circuit" and choice.depolarise_high > choice.depolarise_low:
        ends = [
            fitted(shown(end), group) for end in (choice.depolarise_low, choice.depolarise_high)
        ]
        moved.append((ends[1].level - ends[0].level) / (2 * 1.96))
    if choice.picture == "circuit":
        moved.append(SHARE_DEVIATION * -np.expm1(-np.exp(-fit.log_tau)) * fit.level)
    covariance = fit.covariance * max(fit.chi_square / fit.freedom, 1.0)
    count = len(fit.level)
    covariance[:count, :count] += sum(np.outer(one, one) for one in moved)
    index = np.arange(count)
    covariance[index, index] += (QUBIT_ERROR * fit.level) ** 2
    covariance[count:, count:] += TAU_ERROR**2
    return Networked(
        names,
        told,
        _spread(fit.level, seen, told),
        _spread(fit.log_tau, seen, told),
        _spread_covariance(covariance, seen, told),
        _spread(fit.own, seen, told),
        fit,
        choice,
        design,
        significance,
        _refusal(fit),
        float(other.level.sum() / fit.level.sum() - 1),
    )


def _seen_together(fit: NetworkFit, mask: NDArray[np.bool_]) -> bool:
    """Return whether the mean level of some qubits stands out of its error."""
    if not mask.any():
        return False
    block = fit.covariance[: len(mask), : len(mask)][np.ix_(mask, mask)]
    return bool(fit.level[mask].sum() > CORRELATED * np.sqrt(block.sum()))


def _refusal(fit: NetworkFit) -> str:
    misfit = fit.chi_square / fit.freedom
    if not fit.ended:
        return "the fit of the network did not end"
    if misfit > MISFIT:
        return (
            f"no picture of what a leaked qubit does fits the correlations (chi-square "
            f"{misfit:.1f} per degree of freedom)"
        )
    return ""


def observations(
    detection: xr.Dataset, layout: Layout, curves: Curves, memory: float | None
) -> tuple[PairMoments, Means, FloatArray] | None:
    """Return covariances of pairs, means of checks, and (round, check) detection probability."""
    total = curves.trials.sum(axis=0)
    if len(curves.layers) < FEWEST_LAYERS or np.any(total == 0):
        return None
    extra = extra_layers(detection)
    rounds = detection["round"].values.astype(float)
    interior = curves.events.sum(axis=0) / total
    # The sign must stay positive under the logarithm; a check at one half holds nothing anyway.
    interior = np.clip(interior, 1 / total, 0.5 - 1 / total)
    probability = np.column_stack([np.interp(rounds - 1, curves.layers, one) for one in interior.T])
    lam = 0.8 if memory is None else float(np.clip(memory, 0.05, 0.98))
    growth = np.where(rounds > 1 + extra, 1 - lam ** (rounds - GATES_AHEAD), 0.0)
    place = {name: index for index, name in enumerate(layout.measure)}
    moments = pair_moments(
        detection["products"].values.astype(float),
        detection["block_products"].values.astype(float),
        detection["blocks"].values.astype(float),
        np.array([place[str(name)] for name in detection["early"].values]),
        np.array([place[str(name)] for name in detection["late"].values]),
        probability,
        growth,
        FIRST_LAG + extra,
    )
    if moments is None:
        return None
    sign = 1 - 2 * interior
    means = Means(
        curves.rounds,
        np.log(sign),
        4 * interior * (1 - interior) / total / sign**2,
        -2 * (curves.events - curves.trials * interior) / total / sign,
    )
    return moments, means, probability


def summed_significance(moments: PairMoments) -> float:
    """Return z of the covariance summed over pairs and lags, from its spread over batches."""
    scores = moments.scores.sum(axis=(1, 2))
    batches = int(np.count_nonzero(scores))
    if batches < 2:
        return float("nan")
    error = np.sqrt(np.sum(scores**2) * batches / (batches - 1))
    return float(moments.value.sum() / error)


def _nothing(names: tuple[str, ...], reason: str, significance: float = 0.0) -> Networked:
    count = len(names)
    return Networked(
        names,
        np.zeros(count, dtype=bool),
        np.full(count, np.nan),
        np.full(count, np.nan),
        np.full((2 * count, 2 * count), np.nan),
        np.full(count, np.nan),
        None,
        None,
        None,
        significance,
        reason,
        float("nan"),
    )


def _spread(values: FloatArray, seen: NDArray[np.bool_], told: NDArray[np.bool_]) -> FloatArray:
    out = np.full(len(seen), np.nan)
    out[seen] = values
    out[~told] = np.nan
    return out


def _spread_covariance(
    covariance: FloatArray, seen: NDArray[np.bool_], told: NDArray[np.bool_]
) -> FloatArray:
    count = len(seen)
    out = np.full((2 * count, 2 * count), np.nan)
    both = np.flatnonzero(np.tile(seen, 2))
    out[np.ix_(both, both)] = covariance
    hidden = np.tile(~told, 2)
    out[hidden], out[:, hidden] = np.nan, np.nan
    return out


def network_estimates(network: Networked, layout: Layout) -> dict[str, Any]:
    """Return the network's variables: estimates per qubit, kappa, and what it cannot tell."""
    levels = [_level(network, index) for index in range(len(network.names))]
    settling = [_settling(network, index) for index in range(len(network.names))]
    means = directions(layout.adjacency.astype(float))
    choice, design = network.preference, network.design
    out: dict[str, Any] = {
        **store("network_steady_leakage", ("qubit",), levels),
        **store("network_settling_rounds", ("qubit",), settling, units="rounds"),
        **store("network_depolarise", (), _depolarise(network)),
        "network_picture": ((), "none" if choice is None else choice.picture),
        "network_significance": ((), network.significance, {"units": "1"}),
        "network_observation_shift": ((), network.observation_shift, {"units": "1"}),
        "network_null": ((), "none" if design is None else design.words(network.names)),
        "network_rank": ((), 0 if design is None else design.rank, {"units": "1"}),
        "network_condition": ((), np.nan if design is None else design.condition, {"units": "1"}),
        "means_null": ((), means.words(layout.data)),
        "means_rank": ((), means.rank, {"units": "1"}),
        "means_condition": ((), means.condition, {"units": "1"}),
    }
    fit = network.fit
    out["network_chi_square"] = ((), np.nan if fit is None else fit.chi_square, {"units": "1"})
    out["network_freedom"] = ((), 0 if fit is None else fit.freedom, {"units": "1"})
    return out


def _unknown(network: Networked, index: int) -> Estimate | None:
    if network.reason:
        return Estimate.unknown(network.reason)
    if network.told[index]:
        return None
    if network.design is not None and not network.design.undetermined[index]:
        return Estimate.unknown(
            "its kind shows no correlations two and more rounds apart: it hardly leaks, or not for "
            "so long"
        )
    return Estimate.unknown(f"correlations of this code {_words(network)}")


def _words(network: Networked) -> str:
    if network.design is None:
        return "tell nothing"
    return network.design.words(network.names)


def _level(network: Networked, index: int) -> Estimate:
    unknown = _unknown(network, index)
    if unknown is not None:
        return unknown
    error = float(np.sqrt(network.covariance[index, index]))
    value = float(network.level[index])
    low, high = (float(np.clip(value + sign * T49 * error, 0, 1)) for sign in (-1, 1))
    return Estimate(max(value, 0.0), low, high, basis=network.basis)


def _settling(network: Networked, index: int) -> Estimate:
    unknown = _unknown(network, index)
    if unknown is not None or network.fit is None:
        return unknown or Estimate.unknown(network.reason)
    at = len(network.names) + index
    error = float(np.sqrt(network.covariance[at, at]))
    value = float(network.log_tau[index])
    ends = np.exp(value + np.array([-1, 1]) * T49 * error)
    basis = network.basis
    if network.own[index] < OWN_HALF:
        basis += "; settling mostly shared with the other qubits"
    return Estimate(float(np.exp(value)), float(ends[0]), float(ends[1]), basis=basis)


def _depolarise(network: Networked) -> Estimate:
    choice = network.preference
    if choice is None or network.reason:
        return Estimate.unknown(network.reason)
    if choice.picture != "circuit":
        return Estimate.unknown(
            "the correlations show no effect of leaked qubits on their partners"
        )
    basis = "which pairs of checks are correlated two and more rounds apart"
    return Estimate(choice.depolarise, choice.depolarise_low, choice.depolarise_high, basis=basis)


def network_kappa(network: Networked) -> Estimate | None:
    """Return kappa with the effects on partners accounted for; None where the network has none.

    The correlations say how far leakage raises the means; the means rise by `factor` times that.
    """
    fit = network.fit
    if fit is None or network.reason or fit.factor < 3 * fit.factor_error:
        return None
    error = float(np.hypot(fit.factor_error, KAPPA_ERROR * fit.factor))
    low, high = 1 / (fit.factor + T49 * error), fit.factor - T49 * error
    basis = "correlations of pairs of checks, lags 2 to 8, against the rise of every check"
    return Estimate(1 / fit.factor, low, 1 / high if high > 0 else None, basis=basis)


def network_findings(network: Networked) -> list[Finding]:
    """Return what a reader should know of the network."""
    findings = []
    fit = network.fit
    if fit is not None and network.reason:
        numbers = {"chi_square": fit.chi_square, "freedom": fit.freedom}
        sentence = f"Levels per qubit from correlations are not quoted: {network.reason}."
        findings.append(Finding("network-misfit", "watch", "code", sentence, numbers))
    return findings
