"""Detection probability per round, with the fitted rise and its residuals."""

from __future__ import annotations

import numpy as np

from leakpipe.report.figures.style import (
    COLUMN,
    Drawing,
    NothingToDraw,
    band,
    canvas,
    end_label,
    points,
    spread_apart,
)
from leakpipe.report.inputs import PatchReport
from leakpipe.report.palette import LIGHT
from leakpipe.report.wording import in_rounds, percent

TITLE = "Detection probability per round"
MARKERS = ("o", "s", "^", "D", "v")
HALF_WIDTH = 1.96
"""Standard errors to the half width of a 95 % interval."""


def draw(patch: PatchReport, place: str) -> Drawing:
    """Draw the mean over the checks of each weight, boundary layers hollow, fit and residuals.

    Raises
    ------
    NothingToDraw
        The rates stage has no mean detection probabilities.
    """
    mean = patch.array("rates", "mean_detection", ("weight", "layer"))
    if mean is None or not np.isfinite(mean).any():
        raise NothingToDraw("no detection probabilities per round")
    error = patch.array("rates", "mean_detection_error", ("weight", "layer"))
    error = np.full_like(mean, np.nan) if error is None else error
    weights = patch.labels("rates", "weight")
    layers = np.asarray(patch.labels("rates", "layer"), dtype=float)
    fit = patch.array("rates", "fit_detection", ("weight", "round"))
    low = patch.array("rates", "fit_detection_low", ("weight", "round"))
    high = patch.array("rates", "fit_detection_high", ("weight", "round"))
    rounds = np.asarray(patch.labels("rates", "round"), dtype=float)

    figure = canvas(COLUMN, 3.9, TITLE, place)
    main, strip = figure.subplots(2, 1, sharex=True, height_ratios=(3, 1))
    ends: list[float] = []
    biggest = 2.7
    for row in range(len(weights)):
        marker = MARKERS[row % len(MARKERS)]
        inner = np.isfinite(mean[row])
        edge = inner & np.isin(layers, (layers.min(), layers.max()))
        for chosen, hollow in ((inner & ~edge, False), (edge, True)):
            points(
                main,
                layers[chosen],
                100 * mean[row, chosen],
                100 * HALF_WIDTH * np.nan_to_num(error[row, chosen]),
                color="measure",
                marker=marker,
                hollow=hollow,
            )
        ends.append(100 * float(mean[row, inner & ~edge][-1]) if (inner & ~edge).any() else np.nan)
        if fit is not None and np.isfinite(fit[row]).any():
            main.plot(rounds, 100 * fit[row], color=LIGHT["ink"], linewidth=1.2, zorder=4)
            if low is not None and high is not None:
                band(main, rounds, 100 * low[row], 100 * high[row], "ink")
            expected = np.interp(layers, rounds, fit[row], left=np.nan, right=np.nan)
            with np.errstate(divide="ignore", invalid="ignore"):
                pull = (mean[row] - expected) / error[row]
            shown = np.isfinite(pull) & ~edge
            shift = 0.16 * (row - (len(weights) - 1) / 2)
            biggest = max(biggest, float(np.abs(pull[shown]).max(initial=0.0)))
            points(strip, layers[shown] + shift, pull[shown], None, color="measure", marker=marker)
    main.margins(x=0.02, y=0.1)
    bottom, top = main.get_ylim()
    labels = [height if np.isfinite(height) else (bottom + top) / 2 for height in ends]
    for weight, height in zip(weights, spread_apart(labels, 0.08 * (top - bottom)), strict=True):
        end_label(main, float(layers.max()), height, f"weight {weight}", "measure")
    strip.axhspan(-2, 2, color=LIGHT["hair"], alpha=0.5, linewidth=0)
    strip.axhline(0, color=LIGHT["quiet"], linewidth=0.8)
    strip.set_ylim(-1.1 * biggest, 1.1 * biggest)
    strip.set_ylabel("residual\n(std. errors)")
    strip.set_xlabel("round (the last layer is the closing readout)")
    main.set_ylabel("detection probability (%)")
    rise = percent(patch.estimate("rates", "detection_rise"), sign=True)
    settling = in_rounds(patch.estimate("rates", "settling_rounds"))
    return Drawing(
        figure,
        TITLE,
        "Mean over the checks of each weight; bars and band are 95 % intervals. Hollow points are "
        "the first layer and the closing layer: fewer mechanisms reach them, they are not fitted. "
        "Below: distance of each fitted point from the curve in its own standard errors.",
        f"Points per round for checks of weight {', '.join(map(str, weights))} with a fitted rise "
        f"of {rise} that settles in {settling}.",
    )
