"""The share stage: how much of the logical error per round leakage causes."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Protocol

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.codes.layout import Layout
from leakpipe.config.share import ShareSettings
from leakpipe.estimates import Estimate, read, store
from leakpipe.findings import Finding, with_findings
from leakpipe.logical.per_round import fit_per_round
from leakpipe.recordings.shots import BATCHES, Frame
from leakpipe.share.episodes import Episodes, hazard
from leakpipe.share.exposures import (
    CLOSING_STEPS,
    MEASURE_STEPS,
    ExposureSums,
    merge,
    partial,
)
from leakpipe.share.regression import Regression, Shots, fit, split_closing
from leakpipe.share.routes import CAUTION, MODEL_ERROR, Route, combine
from leakpipe.share.twin import Observed, run_twin

__all__ = ["ExposureSums", "merge", "partial", "share"]

LONG_ENOUGH = 3.0
"""Settling times that the longest memory should last for its logical error to show leakage that has
built up (common practice, no source)."""
TRANSPORT_SEEN = 3.0
TWIN_DURATIONS = 5
ROUTES = ("readings", "twin")

FloatArray = NDArray[np.float64]


class Outcomes(Protocol):
    """What the share needs of the logical stage's sums."""

    @property
    def failed(self) -> NDArray[np.uint8]:
        """(shot,) 1 where the shot failed."""

    @property
    def batch(self) -> NDArray[np.int64]:
        """(shot,) batch of the shot."""


def share(
    reduced: Sequence[tuple[Frame, ExposureSums, Outcomes]],
    logical: xr.Dataset,
    rates: xr.Dataset,
    readout: xr.Dataset,
    detection: xr.Dataset,
    layout: Layout,
    settings: ShareSettings,
    seed: int,
) -> xr.Dataset:
    """Estimate the share by every route that the data allow.

    Parameters
    ----------
    reduced
        Frame, exposures and outcomes per recording.
    logical, rates, readout, detection
        Datasets of those stages.
    layout
        Code layout.
    settings
        The `share` section.
    seed
        Seed of draws and simulations.

    Returns
    -------
    dataset
        `leakage_share`, `leakage_share_statistical`, `share_route` (route), `per_round_without`,
        `fidelity_without` (recording).
    """
    rng = np.random.default_rng(seed)
    used = [
        (frame, exposure, outcome)
        for (frame, exposure, outcome), keep in zip(reduced, logical["used"].values, strict=True)
        if keep
    ]
    routes: list[Route] = []
    reasons: dict[str, str] = {}
    without = np.full(len(reduced), np.nan)
    per_round_without = Estimate.unknown("the share is not determined")
    costs: Regression | None = None
    refusal = _refusal(used, logical, rates, layout)
    if refusal:
        reasons = dict.fromkeys(ROUTES, refusal)
    else:
        costs, route, without_used, per_round_without = _readings(
            used, logical, rates, readout, layout, rng
        )
        without[logical["used"].values.astype(bool)] = without_used
        if route is None:
            reasons["readings"] = "the regression on leaked readings ended on a bound"
        else:
            routes.append(route)
        if settings.twin:
            route, reason = _twin(used, logical, rates, detection, layout, settings, rng)
            if route is None:
                reasons["twin"] = reason
            else:
                routes.append(route)
        else:
            reasons["twin"] = "turned off in the config"
    moved = float(rates["transport_z"]) if "transport_z" in rates else 0.0
    over = max(float(rates["transport"]), 0.0) if moved > TRANSPORT_SEEN else None
    total, findings = combine(routes, transport=over)
    if not routes:
        total = Estimate.unknown(refusal or "no route to the share could be followed")
    findings += _practice(logical, rates)
    by_name = {route.name: route.estimate() for route in routes}
    names = list(ROUTES)
    values = [by_name.get(name, Estimate.unknown(reasons.get(name, ""))) for name in names]
    statistical = Estimate.unknown("no route")
    if routes and total.value is not None:
        first = routes[0]
        statistical = Estimate.from_error(first.share, first.statistical, first.basis)
    variables: dict[str, Any] = {
        **store("leakage_share", (), total, long_name="share of the logical error per round"),
        **store("leakage_share_statistical", (), statistical),
        **store("share_route", ("route",), values),
        **store("per_round_without", (), per_round_without, units="per round"),
        "fidelity_without": ("recording", without, {"units": "1"}),
        "measure_cost": ((), costs.measure_cost if costs else np.nan, {"units": "1"}),
        "data_cost": ((), costs.full if costs else np.nan, {"units": "1"}),
        "data_cost_memory": ((), costs.memory if costs else np.nan, {"units": "1"}),
    }
    out = xr.Dataset(
        variables,
        coords={
            "recording": logical["recording"].values,
            "rounds": ("recording", logical["rounds"].values),
            "route": names,
        },
        attrs={"range_of_rounds": logical.attrs["range_of_rounds"], "caution": CAUTION},
    )
    return with_findings(out, findings)


def _refusal(
    used: Sequence[tuple[Frame, ExposureSums, Outcomes]],
    logical: xr.Dataset,
    rates: xr.Dataset,
    layout: Layout,
) -> str:
    """Return why no share can be had, or nothing."""
    if read(logical, "logical_error_per_round").value is None or len(used) < 2:
        return "the logical error per round is not determined"
    data = list(layout.data)
    known = rates.sel(qubit=data)["qubit_injection"].values
    if not np.isfinite(known).all():
        missing = [name for name, ok in zip(data, np.isfinite(known), strict=True) if not ok]
        return f"injection is not identifiable for {', '.join(missing)}"
    return ""


def _readings(
    used: Sequence[tuple[Frame, ExposureSums, Outcomes]],
    logical: xr.Dataset,
    rates: xr.Dataset,
    readout: xr.Dataset,
    layout: Layout,
    rng: np.random.Generator,
) -> tuple[Regression, Route | None, FloatArray, Estimate]:
    """Follow the regression on leaked readings."""
    data = list(layout.data)
    picked = rates.sel(qubit=data)
    leaked = _measure_leaked(readout)
    centre = _episodes(picked["qubit_injection"].values, picked["qubit_seepage"].values, leaked)
    costs = fit(_shots(used), centre.ending)
    rounds = np.array([frame.rounds for frame, _, _ in used])
    mask = logical["used"].values.astype(bool)
    error = logical["logical_error"].values[mask]
    spread = logical["logical_error_error"].values[mask]
    value, without, eps_without = _share_of(rounds, error, spread, centre, costs)
    injection, seepage = picked["injection_draw"].values, picked["seepage_draw"].values
    sample = rng.multivariate_normal(
        [costs.log_measure, costs.full, costs.memory],
        costs.covariance,
        size=len(injection),
        method="eigh",
    )
    draws = []
    for g, s, (c, full, memory) in zip(injection, seepage, sample, strict=True):
        one = Regression(
            float((1 - np.exp(c)) / 2),
            full,
            float(np.clip(memory, 0, 0.98)),
            costs.covariance,
            c,
            False,
        )
        noise = rng.normal(size=len(error)) * spread
        found = _share_of(
            rounds, np.clip(error + noise, 1e-6, 0.5), spread, _episodes(g, s, leaked), one
        )
        draws.append((found[0], found[2]))
    table = np.array(draws)
    table = table[np.isfinite(table).all(axis=1)]
    basis = "regression on leaked readings of measure qubits and closing readout"
    # Half the distance between percentiles: robust against the odd draw at a pole.
    low, high = np.percentile(table, [16, 84], axis=0)
    statistical = float(high[0] - low[0]) / 2
    route = None
    if np.isfinite(value) and not costs.at_bound:
        model = MODEL_ERROR["readings"] * abs(value)
        route = Route("readings", value, statistical, model, basis)
    estimate = Estimate.from_error(eps_without, float(high[1] - low[1]) / 2, basis)
    return costs, route, without, estimate


def _share_of(
    rounds: NDArray[np.int64],
    error: FloatArray,
    spread: FloatArray,
    episodes: Episodes,
    costs: Regression,
) -> tuple[float, FloatArray, float]:
    """Return share, fidelity without leakage and eps without: the same fit on both fidelities."""
    extra = np.array(
        [hazard(int(r), episodes, costs.measure_cost, costs.full, costs.memory) for r in rounds]
    )
    fidelity, variance = 1 - 2 * error, (2 * spread) ** 2
    without = fidelity * np.exp(extra)
    with_fit = fit_per_round(rounds.astype(float), fidelity, variance)
    without_fit = fit_per_round(rounds.astype(float), without, variance * np.exp(2 * extra))
    if with_fit is None or without_fit is None:
        return float("nan"), without, float("nan")
    eps, eps_without = with_fit.error_per_round, without_fit.error_per_round
    return (eps - eps_without) / eps, without, eps_without


def _episodes(injection: FloatArray, seepage: FloatArray, measure_leaked: float) -> Episodes:
    return Episodes(np.maximum(injection, 1e-9), np.maximum(seepage, 1e-6), measure_leaked)


def _measure_leaked(readout: xr.Dataset) -> float:
    """Return the mean number of leaked measure qubits per round, recordings pooled by shots."""
    plain = readout["injected"].values == 0
    leaked = readout["leaked"].values[plain]
    shots = readout["shots"].values[plain].astype(float)
    weight = np.isfinite(leaked).all(axis=2) * shots[:, None]
    total = np.nansum(leaked, axis=2)
    return max(float((np.where(weight > 0, total, 0.0) * weight).sum() / weight.sum()), 0.0)


def _shots(used: Sequence[tuple[Frame, ExposureSums, Outcomes]]) -> Shots:
    rounds = np.unique([frame.rounds for frame, _, _ in used])
    quiet, loud = zip(
        *(split_closing(exposure.closing / CLOSING_STEPS) for _, exposure, _ in used), strict=True
    )
    slots = max(one.shape[1] for one in loud)
    return Shots(
        group=np.concatenate(
            [np.full(len(o.failed), np.searchsorted(rounds, f.rounds)) for f, _, o in used]
        ),
        rounds=rounds.astype(np.int64),
        failed=np.concatenate([outcome.failed for _, _, outcome in used]).astype(float),
        measure=np.concatenate([exposure.measure for _, exposure, _ in used]) / MEASURE_STEPS,
        quiet=np.concatenate(quiet),
        loud=np.concatenate([np.pad(one, ((0, 0), (0, slots - one.shape[1]))) for one in loud]),
        cluster=np.concatenate(
            [row * BATCHES + outcome.batch for row, (_, _, outcome) in enumerate(used)]
        ),
    )


def _twin(
    used: Sequence[tuple[Frame, ExposureSums, Outcomes]],
    logical: xr.Dataset,
    rates: xr.Dataset,
    detection: xr.Dataset,
    layout: Layout,
    settings: ShareSettings,
    rng: np.random.Generator,
) -> tuple[Route | None, str]:
    """Follow the twin."""
    frame = used[0][0]
    observed = Observed(_interior_probability(detection), _successive(detection))
    if not np.all(np.isfinite([observed.detection, observed.successive])):
        return None, "too few interior rounds to set the twin's ordinary errors by"
    durations = np.unique([one.rounds for one, _, _ in used])
    picks = durations[np.unique(np.linspace(0, len(durations) - 1, TWIN_DURATIONS).astype(int))]
    twin = run_twin(
        layout,
        frame.basis,
        [int(r) for r in picks],
        rates["qubit_injection"].values,
        rates["qubit_seepage"].values,
        observed,
        settings.twin_shots,
        rng,
        reset=frame.reset,
    )
    if twin is None:
        return None, "the twin's logical error per round is not determined"
    # The fitted rates carry their own error: the share is about proportional to injection.
    draws = np.nansum(rates["injection_draw"].values, axis=1)
    relative = float(np.std(draws) / np.mean(draws))
    statistical = float(np.hypot(twin.statistical, relative * twin.share))
    model = float(np.hypot(MODEL_ERROR["twin"] * twin.share, twin.spread))
    basis = "simulation at the fitted rates with and without injection, two consequence models"
    return Route("twin", twin.share, statistical, model, basis), ""


def _interior_probability(detection: xr.Dataset) -> FloatArray:
    """Return each check's detection probability over interior layers, (check,)."""
    events = detection["events"].values.sum(axis=1).astype(float)
    trials = detection["trials"].values.sum(axis=1).astype(float)
    for row, (rounds, injected) in enumerate(
        zip(detection["rounds"].values, detection["injected"].values, strict=True)
    ):
        outside = np.ones(events.shape[1], dtype=bool)
        outside[1:rounds] = bool(injected)
        events[row, outside] = trials[row, outside] = 0.0
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(events.sum(axis=(0, 1)) / trials.sum(axis=(0, 1)))


def _successive(detection: xr.Dataset) -> FloatArray:
    """Return the covariance of each check's events in successive interior layers, (check,)."""
    same = np.flatnonzero(detection["early"].values == detection["late"].values)
    block = float(detection.attrs["block"])
    pooled = detection[["products", "block_products"]].isel(pair=same, lag=1).sum("batch")
    blocks = detection["blocks"].values.sum(axis=0).astype(float)
    # A product at layer r needs r + 1 interior too: the blocks of the later layer.
    behind = np.append(blocks[1:], 0.0)
    behind[0] = 0.0
    excess = pooled["products"].values - pooled["block_products"].values / block
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(excess.sum(axis=1) / ((block - 1) * behind.sum()))


def _practice(logical: xr.Dataset, rates: xr.Dataset) -> list[Finding]:
    """Return findings about how the recordings were taken."""
    settling = read(rates, "settling_rounds").value
    rounds = logical["rounds"].values
    if settling is None or not len(rounds) or rounds.max() >= LONG_ENOUGH * settling:
        return []
    return [
        Finding(
            "runs-too-short",
            "watch",
            "recordings",
            f"The longest memory has {rounds.max()} rounds, less than {LONG_ENOUGH:.0f} settling "
            f"times ({settling:.1f} rounds): leakage has not built up fully in it.",
            {"rounds": int(rounds.max()), "settling_rounds": settling},
        )
    ]
