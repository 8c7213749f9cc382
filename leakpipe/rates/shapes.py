"""What the rates stage reports of the rise as a whole: shared settling time, shape, start scan."""

from __future__ import annotations

from typing import Any

import numpy as np

from leakpipe.estimates import Estimate, store
from leakpipe.findings import Finding
from leakpipe.rates.choice import ShapeChoice, StartScan, choose_shape, scan_starts
from leakpipe.rates.curves import Curves
from leakpipe.rates.rise import FEWEST_ROUNDS, RiseFit
from leakpipe.rates.shared_rise import SharedRise, fit_shared_rise


def shape_report(curves: Curves) -> tuple[dict[Any, Any], list[Finding]]:
    """Return the variables and findings about the shape of a code's rise.

    Parameters
    ----------
    curves
        Interior detection counts.

    Returns
    -------
    variables
        Estimate `shared_settling_rounds` (one settling time, a level and an amplitude per check);
        text `shared_status`, `rise_shape` and `rise_course`; `scan_settling_rounds` over
        `scan_first`, the first fitted round.
    findings
        A rise that is over early, and two settling times in one rise.
    """
    total = curves.trials.sum(axis=0)
    whole = np.all(total > 0, axis=0)
    if len(curves.rounds) < FEWEST_ROUNDS or not whole.any():
        return _variables(None, None, None), []
    events = curves.events[:, :, whole].transpose(0, 2, 1)
    trials = curves.trials[:, :, whole].transpose(0, 2, 1)
    total = trials.sum(axis=0)
    probability = events.sum(axis=0) / total
    variance = np.maximum(probability * (1 - probability), 1 / total) / total
    deviations = (events - trials * probability) / total
    shared = fit_shared_rise(curves.rounds, probability, variance, deviations)
    checks = len(probability)
    mean = (
        curves.rounds,
        probability.mean(axis=0),
        variance.sum(axis=0) / checks**2,
        deviations.mean(axis=1),
    )
    shape, scan = choose_shape(*mean), scan_starts(*mean)
    return _variables(shared, shape, scan), _findings(shape, scan)


def _variables(
    shared: SharedRise | None, shape: ShapeChoice | None, scan: StartScan | None
) -> dict[Any, Any]:
    if shared is None:
        settling = Estimate.unknown("too few interior rounds, or no rise to share a settling time")
    else:
        basis = f"rise of {len(shared.level)} checks with one settling time"
        settling = _settling(shared, basis)
    if scan is None:
        first, scanned = np.array([np.nan]), [Estimate.unknown("too few interior rounds")]
    else:
        first = scan.first
        scanned = [_settling(fit, "rise from this round on") for fit in scan.fits]
    return {
        **store("shared_settling_rounds", (), settling, units="rounds"),
        **store("scan_settling_rounds", ("scan_first",), scanned, units="rounds"),
        "scan_first": ("scan_first", first, {"units": "rounds"}),
        "shared_status": ((), "no data" if shared is None else shared.status),
        "rise_shape": ((), "no data" if shape is None else shape.shape),
        "rise_course": ((), "no data" if scan is None else scan.course),
    }


def _settling(fit: RiseFit | SharedRise, basis: str) -> Estimate:
    """Return a settling time, or the bound that an open interval leaves."""
    if fit.status == "settled":
        return Estimate(fit.tau, fit.tau_low, fit.tau_high, basis=basis)
    if fit.status == "long":
        reason = f"{basis}: open above, still rising at the end of the longest run"
        return Estimate(None, fit.tau_low, None, identifiable=False, basis=reason)
    if fit.status == "short" and np.isfinite(fit.tau_high):
        return Estimate.upper_limit(fit.tau_high, f"{basis}: open below, over at once")
    return Estimate.unknown(f"{basis}: {fit.status}")


def _findings(shape: ShapeChoice, scan: StartScan) -> list[Finding]:
    findings = []
    if scan.course == "over early":
        sentence = (
            "The detection probability rises only in the first rounds: leakage that settles so "
            "fast and a transient of the first rounds look alike in it; kappa can tell."
        )
        numbers = {"tau": scan.fits[0].tau, "first_round": float(scan.first[0])}
        findings.append(Finding("rise-over-early", "watch", "code", sentence, numbers))
    if shape.shape == "two exponentials":
        sentence = (
            "The rise has two settling times (likelihood ratio "
            f"{shape.ratio_two:.1f}, limit {shape.critical_two[1]:.1f}): leakage of two kinds, or "
            "leakage and a transient; the one quoted lies between them."
        )
        numbers = {"ratio": shape.ratio_two, "limit": shape.critical_two[1]}
        findings.append(Finding("rise-two-times", "note", "code", sentence, numbers))
    return findings
