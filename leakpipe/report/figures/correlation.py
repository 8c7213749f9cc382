"""Covariance of detection events against their lag, with the law that leakage follows."""

from __future__ import annotations

import numpy as np

from leakpipe.report.figures.detection import HALF_WIDTH
from leakpipe.report.figures.style import COLUMN, Drawing, NothingToDraw, canvas, points
from leakpipe.report.inputs import PatchReport
from leakpipe.report.palette import LIGHT
from leakpipe.report.wording import number

TITLE = "Covariance of detection events against lag"
FIRST_LAG = 2
"""Ordinary error mechanisms span at most two rounds, so they reach lags 0 and 1 only."""


def draw(patch: PatchReport, place: str) -> Drawing:
    """Draw the covariances two and more rounds apart with the fitted leakage law.

    Raises
    ------
    NothingToDraw
        The rates stage has no lag covariances.
    """
    covariance = patch.array("rates", "lag_covariance", ("lag",))
    lags = np.asarray(patch.labels("rates", "lag"), dtype=float)
    if covariance is None or not np.isfinite(covariance[lags >= FIRST_LAG]).any():
        raise NothingToDraw("no covariances two or more rounds apart")
    error = patch.array("rates", "lag_covariance_error", ("lag",))
    law = patch.array("rates", "lag_covariance_fit", ("lag",))
    shown = (lags >= FIRST_LAG) & np.isfinite(covariance)
    unit = 10.0 ** np.floor(np.log10(np.abs(covariance[shown]).max() or 1.0))
    figure = canvas(COLUMN, 3.1, TITLE, place)
    axes = figure.subplots()
    bars = None if error is None else HALF_WIDTH * np.nan_to_num(error[shown]) / unit
    points(axes, lags[shown], covariance[shown] / unit, bars, color="measure", marker="s")
    if law is not None:
        known = (lags >= FIRST_LAG) & np.isfinite(law)
        axes.plot(lags[known], law[known] / unit, color=LIGHT["ink"], linewidth=1.2)
    axes.axhline(0, color=LIGHT["quiet"], linewidth=0.8)
    axes.margins(x=0.06)
    axes.set_xlabel("lag (rounds)")
    axes.set_ylabel(f"covariance ({_power(unit)})")
    axes.set_xticks(lags[shown])
    kappa = number(patch.estimate("rates", "kappa"))
    return Drawing(
        figure,
        TITLE,
        "Mean over checks; bars are 95 % intervals, the curve is the fitted law of leakage, "
        "falling by the same factor each round. Lags 0 and 1 are not shown: ordinary errors reach "
        f"them. Strength of this against the rise, kappa: {kappa} (1 leakage, 0 heating).",
        f"Covariance falls from {covariance[shown][0]:.2g} at lag {lags[shown][0]:.0f} to "
        f"{covariance[shown][-1]:.2g} at lag {lags[shown][-1]:.0f}.",
    )


def _power(unit: float) -> str:
    """Return a power of ten in plain characters."""
    exponent = round(np.log10(unit))
    return "1" if exponent == 0 else f"units of 1e{exponent}"
