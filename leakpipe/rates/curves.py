"""Detection curves and correlations of a patch, labelled counts in, fits out."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.rates.correlation import FIRST_LAG, LagFit, fit_lags
from leakpipe.rates.rise import RiseFit, fit_rise

CORRELATED = 3.0
"""z of the summed lag >= 2 covariance above which leakage is seen in it (prototype study)."""

MODEL_ERROR = 0.05
"""Relative systematic of a settling time from correlations: they came out 2 to 9 % short in
rehearsed runs of two to four settling times (more than one leaked neighbour, gates at different
moments of a round)."""
GATES_AHEAD = 0.625
"""Rounds by which the gates of a round see the leaked population before it is read at the end of
the round: half a round's gates of four have injected by then, seepage acted at its start. Without
it lam comes out 1 % too small in runs of two settling times (rehearsal)."""

FloatArray = NDArray[Any]


def extra_layers(detection: xr.Dataset) -> int:
    """Return 1 without reset, where an event compares rounds two apart, else 0.

    A check's value is then the change of a bit, an event the change of that: m_r xor m_(r-2). The
    first interior layer and the first lag free of ordinary errors come one later.
    """
    return 0 if detection.attrs.get("reset", 1) else 1


@dataclass(frozen=True)
class Curves:
    """Interior detection counts pooled over recordings."""

    rounds: FloatArray
    layers: NDArray[np.int64]
    events: FloatArray
    trials: FloatArray


def interior(detection: xr.Dataset, boundary: int) -> Curves:
    """Pool events and trials over recordings, interior layers only, (batch, layer, check)."""
    events = detection["events"].values.astype(float).copy()
    trials = detection["trials"].values.astype(float).copy()
    for row, (rounds, injected) in enumerate(
        zip(detection["rounds"].values, detection["injected"].values, strict=True)
    ):
        outside = np.ones(events.shape[2], dtype=bool)
        outside[boundary:rounds] = bool(injected)
        events[row][:, outside] = 0.0
        trials[row][:, outside] = 0.0
    events, trials = events.sum(axis=0), trials.sum(axis=0)
    layers = np.flatnonzero(trials.sum(axis=(0, 2)) > 0)
    return Curves(layers + 1.0, layers, events[:, layers], trials[:, layers])


def fit_mean(curves: Curves, check: int | None = None) -> RiseFit:
    """Fit the rise of one check, or of the mean over checks."""
    columns = slice(None) if check is None else slice(check, check + 1)
    events = curves.events[:, :, columns].sum(axis=2)
    trials = curves.trials[:, :, columns].sum(axis=2)
    total = trials.sum(axis=0)
    if not len(total) or np.any(total == 0):
        return fit_rise(np.zeros(0), np.zeros(0), np.zeros(0), np.zeros((50, 0)))
    probability = events.sum(axis=0) / total
    variance = np.maximum(probability * (1 - probability), 1 / total) / total
    return fit_rise(curves.rounds, probability, variance, (events - trials * probability) / total)


def fit_correlations(detection: xr.Dataset, rise: RiseFit) -> tuple[LagFit | None, LagFit | None]:
    """Fit the leakage law to same-check and to pair covariances."""
    products = detection["products"].values.astype(float)
    block_products = detection["block_products"].values.astype(float)
    blocks = detection["blocks"].values.astype(float)
    same = detection["early"].values == detection["late"].values
    rounds = detection["round"].values.astype(float)
    memory = np.exp(-1 / rise.tau) if rise.status in ("settled", "long") else 0.8
    visible = np.ones(len(rounds))
    if rise.status not in ("no data", "no rise"):
        visible = (1 - 2 * rise.curve(rounds)) / (1 - 2 * rise.start)
    fits: list[LagFit | None] = [None, None]
    extra = extra_layers(detection)
    # The growth of the early round's population uses lam itself: iterate.
    for _ in range(3):
        growth = np.where(rounds > 1 + extra, 1 - memory ** (rounds - GATES_AHEAD), 0.0)
        fits = [
            fit_lags(
                products[:, mask],
                block_products[:, mask],
                blocks,
                growth,
                visible,
                FIRST_LAG + extra,
            )
            for mask in (same, ~same)
        ]
        found = [fit for fit in fits if fit is not None and fit.significance > CORRELATED]
        if not found:
            break
        memory = float(np.clip(found[0].memory, 0.05, 0.98))
    return fits[0], fits[1]


def memory_of_code(
    rise: RiseFit, same: LagFit | None, pairs: LagFit | None
) -> tuple[float, float, str] | None:
    """Return lam of the code, its variance and basis, from rise and correlations together.

    The same-check and pair covariances share the leaked qubits they see, so the better one counts
    and the other is not added to it.
    """
    values, variances, words = [], [], []
    seen = [f for f in (same, pairs) if f is not None and f.significance > CORRELATED]
    seen = [f for f in seen if np.isfinite(f.memory_error) and 0 < f.memory_error < 1]
    if seen:
        best = min(seen, key=lambda fit: fit.memory_error)
        values.append(best.memory)
        systematic = MODEL_ERROR * best.memory * abs(np.log(best.memory))
        variances.append(best.memory_error**2 + systematic**2)
        words.append("correlations of detection events, lags 2 to 8")
    if rise.status == "settled":
        lam = float(np.exp(-1 / rise.tau))
        slope = lam / rise.tau
        values.append(lam)
        variances.append((slope * rise.log_tau_error) ** 2)
        words.append("rise of the detection probability")
    if not values:
        return None
    weight = 1 / np.array(variances)
    value = float(np.sum(weight * values) / weight.sum())
    return value, float(1 / weight.sum()), "; ".join(words)


def drawn_curves(
    detection: xr.Dataset,
    curves: Curves,
    rise: RiseFit,
    same: LagFit | None,
    pairs: LagFit | None,
) -> dict[Any, Any]:
    """Return what the figures of the rise and of the correlations show."""
    weights = np.unique(detection["weight"].values)
    plain = detection["injected"].values == 0
    rounds, layers = detection["round"].values.astype(float), detection.sizes["layer"]
    events, trials = _layers(detection, plain)
    shape = (len(weights), layers)
    mean, error = np.full(shape, np.nan), np.full(shape, np.nan)
    fit, low, high = (np.full((len(weights), len(rounds)), np.nan) for _ in range(3))
    for row, weight in enumerate(weights):
        mask = detection["weight"].values == weight
        e, n = events[:, :, mask].sum(axis=2), trials[:, :, mask].sum(axis=2)
        total = n.sum(axis=0)
        with np.errstate(divide="ignore", invalid="ignore"):
            mean[row] = e.sum(axis=0) / total
            deviation = np.where(n > 0, e - n * mean[row], 0.0) / total
        error[row] = np.sqrt((deviation**2).sum(axis=0) * 50 / 49)
        own = Curves(
            curves.rounds, curves.layers, curves.events[:, :, mask], curves.trials[:, :, mask]
        )
        one = fit_mean(own)
        if one.status != "no data":
            fit[row] = one.curve(rounds)
            width = 2.01 * one.curve_error(rounds)
            low[row], high[row] = fit[row] - width, fit[row] + width
    lags = detection["lag"].values
    covariance, spread, law = (np.full(len(lags), np.nan) for _ in range(3))
    if same is not None:
        checks = detection.sizes["check"]
        covariance[same.lags] = same.covariance / checks
        spread[same.lags] = same.error / checks
        law[same.lags] = same.amplitude * same.memory**same.lags / checks
    return {
        "mean_detection": (("weight", "layer"), mean, {"units": "1"}),
        "mean_detection_error": (("weight", "layer"), error, {"units": "1"}),
        "fit_detection": (("weight", "round"), fit, {"units": "1"}),
        "fit_detection_low": (("weight", "round"), low, {"units": "1"}),
        "fit_detection_high": (("weight", "round"), high, {"units": "1"}),
        "lag_covariance": ("lag", covariance, {"units": "1"}),
        "lag_covariance_error": ("lag", spread, {"units": "1"}),
        "lag_covariance_fit": ("lag", law, {"units": "1"}),
    }


def _layers(detection: xr.Dataset, plain: NDArray[np.bool_]) -> tuple[FloatArray, FloatArray]:
    """Pool counts over recordings: interior layers at their place, the longest run's last layer.

    Closing layers of shorter recordings stand at interior places and are left out.
    """
    events = detection["events"].values[plain].astype(float).copy()
    trials = detection["trials"].values[plain].astype(float).copy()
    rounds = detection["rounds"].values[plain]
    for row, last in enumerate(rounds):
        if last != rounds.max():
            events[row][:, last], trials[row][:, last] = 0.0, 0.0
    return events.sum(axis=0), trials.sum(axis=0)
