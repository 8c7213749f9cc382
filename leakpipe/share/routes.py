"""Routes to the share: what each says, whether they agree, which one is reported."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.stats import norm

from leakpipe.estimates import LEVEL, Estimate
from leakpipe.findings import Finding

MODEL_ERROR = {"readings": 0.12, "injected": 0.15, "twin": 0.15}
"""Relative model error of each route, measured against counterfactual truth on rehearsed distance-3
devices (readings 5 to 15 % high, injected 9 to 21 %, twin 19 to 27 % before its spread)."""

PREFERENCE = ("readings", "injected", "twin")
DISAGREE = 2.0
"""Joint standard errors beyond which two routes disagree."""
NULL = 2.0
"""Standard errors below which a share is reported as an upper limit."""

CAUTION = (
    "The share rests on rare, independent leakage episodes with geometric lifetimes and on the "
    "code layout as given. Check it against local practice and a responsible operator's judgement "
    "before changing hardware settings."
)


@dataclass(frozen=True)
class Route:
    """One route's share.

    Attributes
    ----------
    name
        "readings" (regression on leaked readings), "injected" (runs with an injected leak) or
        "twin" (simulation with and without injection).
    share
        (eps with - eps without) / eps with.
    statistical
        Standard error from the shots and the fitted rates.
    model
        Standard error from the route's assumptions.
    basis
        Which data it rests on.
    """

    name: str
    share: float
    statistical: float
    model: float
    basis: str

    @property
    def error(self) -> float:
        """Both errors in quadrature."""
        return float(np.hypot(self.statistical, self.model))

    def estimate(self) -> Estimate:
        """Return the share with both errors; an upper limit where it is compatible with 0."""
        if self.share < NULL * self.statistical:
            z = float(norm.ppf(LEVEL))
            high = max(self.share, 0.0) + z * self.error
            return Estimate.upper_limit(high, f"{self.basis}; compatible with no leakage")
        return Estimate.from_error(self.share, self.error, self.basis)


def preferred(routes: Sequence[Route]) -> Route | None:
    """Return the route whose number is reported: measured costs before inferred ones."""
    by_name = {route.name: route for route in routes}
    return next((by_name[name] for name in PREFERENCE if name in by_name), None)


def combine(routes: Sequence[Route], *, transport: float | None) -> tuple[Estimate, list[Finding]]:
    """Return the reported share and what the routes say about each other.

    Parameters
    ----------
    routes
        Those that gave a number.
    transport
        Relative over-count by leakage that moves between qubits, where that was seen; the number
        then becomes a range.
    """
    best = preferred(routes)
    if best is None:
        return Estimate.unknown("no route to the share could be followed"), []
    findings = []
    for other in routes:
        gap = abs(other.share - best.share)
        joint = float(np.hypot(other.error, best.error))
        if other is not best and gap > DISAGREE * joint:
            findings.append(
                Finding(
                    "routes-disagree",
                    "watch",
                    "share",
                    f"Routes to the share disagree: {best.name} says {best.share:.1%}, "
                    f"{other.name} says {other.share:.1%}, joint error {joint:.1%}.",
                    {"best": best.share, "other": other.share, "joint_error": joint},
                )
            )
    if transport is not None:
        low = max(best.share / (1 + transport) - 2 * best.error, 0.0)
        high = best.share + 2 * best.error
        reason = (
            f"leakage moves between qubits, so an episode is counted up to {1 + transport:.2f} "
            "times: a range, not a number"
        )
        return Estimate(None, low, high, LEVEL, False, reason), findings
    return best.estimate(), findings
