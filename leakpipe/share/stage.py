"""The share stage: how much of the logical error per round leakage causes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.codes.layout import Layout
from leakpipe.config.share import ShareSettings
from leakpipe.estimates import Estimate, read, store
from leakpipe.findings import Finding, with_findings
from leakpipe.share.exposures import ExposureSums, merge, partial
from leakpipe.share.injected import by_age
from leakpipe.share.inputs import (
    Reduced,
    injections_of,
    interior_probability,
    leakage_of,
    shots_of,
    successive_covariance,
)
from leakpipe.share.leakage_free import LeakageFree, Memories, by_injection, by_readings
from leakpipe.share.regression import Regression, fit
from leakpipe.share.routes import CAUTION, MODEL_ERROR, Route, combine, preferred
from leakpipe.share.twin import Observed, run_twin

__all__ = ["ExposureSums", "merge", "partial", "share"]

LONG_ENOUGH = 3.0
"""Settling times that the longest memory should last for its logical error to show leakage that has
built up (common practice, no source)."""
TRANSPORT_SEEN = 3.0
TWIN_DURATIONS = 5
ROUTES = ("injected", "readings", "twin")
BASES = {
    "readings": "regression on leaked readings of measure qubits and closing readout",
    "injected": "logical errors after injected leaks; leaked readings of measure qubits",
}

FloatArray = NDArray[np.float64]


def share(
    reduced: Reduced,
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
    mask = logical["used"].values.astype(bool)
    used = [one for one, keep in zip(reduced, mask, strict=True) if keep]
    routes: list[Route] = []
    said: dict[str, LeakageFree] = {}
    reasons: dict[str, str] = {}
    costs: Regression | None = None
    measured: FloatArray = np.zeros((0, 4))
    refusal = _refusal(used, logical, rates, layout)
    if refusal:
        reasons = dict.fromkeys(ROUTES, refusal)
    else:
        memories = Memories(
            np.array([frame.rounds for frame, _, _ in used]),
            logical["logical_error"].values[mask],
            logical["logical_error_error"].values[mask],
        )
        leakage = leakage_of(rates, readout, layout, rng)
        costs = fit(shots_of(used), leakage.episodes.ending)
        if costs.at_bound:
            reasons["readings"] = "the regression on leaked readings ended on a bound"
        else:
            said["readings"] = by_readings(memories, costs, leakage, rng)
        runs, kernel, reasons["injected"] = injections_of(reduced, logical, leakage, layout)
        if runs is not None:
            measured = by_age(runs, kernel, leakage.episodes.ending)
        if runs is not None and kernel is not None:
            said["injected"] = by_injection(memories, costs, leakage, runs, kernel, rng)
        routes = _routes(said)
        if settings.twin:
            route, reasons["twin"] = _twin(used, logical, rates, detection, layout, settings, rng)
            routes += [route] if route is not None else []
        else:
            reasons["twin"] = "turned off in the config"
    total, findings = combine(routes, transport=_transport(rates))
    if not routes:
        total = Estimate.unknown(refusal or "no route to the share could be followed")
    findings += _practice(logical, rates)
    variables = _variables(routes, said, reasons, total, logical, costs, measured, mask)
    out = xr.Dataset(
        variables,
        coords={
            "recording": logical["recording"].values,
            "rounds": ("recording", logical["rounds"].values),
            "route": list(ROUTES),
            "lag": measured[:, 0].astype(int),
        },
        attrs={"range_of_rounds": logical.attrs["range_of_rounds"], "caution": CAUTION},
    )
    if not logical["injected"].values.any():
        # A route that nobody set out on is not worth a "cannot say" every night.
        out = out.drop_sel(route=["injected"])
    return with_findings(out, findings)


def _routes(said: dict[str, LeakageFree]) -> list[Route]:
    """Return the routes that gave a number, with their model errors."""
    return [
        Route(name, one.share, one.share_error, MODEL_ERROR[name] * abs(one.share), BASES[name])
        for name, one in said.items()
        if np.isfinite([one.share, one.share_error]).all()
    ]


def _variables(
    routes: Sequence[Route],
    said: dict[str, LeakageFree],
    reasons: dict[str, str],
    total: Estimate,
    logical: xr.Dataset,
    costs: Regression | None,
    measured: FloatArray,
    mask: NDArray[np.bool_],
) -> dict[str, Any]:
    """Return the stage's variables."""
    by_name = {route.name: route.estimate() for route in routes}
    best = preferred(routes)
    statistical = Estimate.unknown("no route")
    if best is not None and total.value is not None:
        statistical = Estimate.from_error(best.share, best.statistical, best.basis)
    without = np.full(len(mask), np.nan)
    per_round = Estimate.unknown("the share is not determined")
    shown = said.get(best.name) if best is not None else None
    if best is not None and shown is not None:
        without[mask] = shown.fidelity
        eps = read(logical, "logical_error_per_round").value or 0.0
        # The route's model error of the share moves eps without leakage by eps times it.
        error = float(np.hypot(shown.per_round_error, best.model * eps))
        per_round = Estimate.from_error(shown.per_round, error, best.basis)
        if total.value is None and total.low is not None and total.high is not None:
            low, high = eps * (1 - total.high), eps * (1 - total.low)
            per_round = replace(
                per_round, value=None, low=low, high=high, identifiable=False, basis=total.basis
            )
    values = [by_name.get(name, Estimate.unknown(reasons.get(name, ""))) for name in ROUTES]
    return {
        **store("leakage_share", (), total, long_name="share of the logical error per round"),
        **store("leakage_share_statistical", (), statistical),
        **store("share_route", ("route",), values),
        **store("per_round_without", (), per_round, units="per round"),
        "fidelity_without": ("recording", without, {"units": "1"}),
        "measure_cost": ((), costs.measure_cost if costs else np.nan, {"units": "1"}),
        "data_cost": ((), costs.full if costs else np.nan, {"units": "1"}),
        "data_cost_memory": ((), costs.memory if costs else np.nan, {"units": "1"}),
        "cost": ("lag", measured[:, 1], {"units": "1", "long_name": "cost of an injected leak"}),
        "cost_error": ("lag", measured[:, 2], {"units": "1"}),
        "cost_kernel": ("lag", measured[:, 3], {"units": "1"}),
    }


def _transport(rates: xr.Dataset) -> float | None:
    """Return the relative over-count by leakage that moves, where it was seen."""
    moved = float(rates["transport_z"]) if "transport_z" in rates else 0.0
    return max(float(rates["transport"]), 0.0) if moved > TRANSPORT_SEEN else None


def _refusal(
    used: Reduced,
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


def _twin(
    used: Reduced,
    logical: xr.Dataset,
    rates: xr.Dataset,
    detection: xr.Dataset,
    layout: Layout,
    settings: ShareSettings,
    rng: np.random.Generator,
) -> tuple[Route | None, str]:
    """Follow the twin."""
    frame = used[0][0]
    observed = Observed(interior_probability(detection), successive_covariance(detection))
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
