"""Logical fidelity against the number of rounds, with and without leakage."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import FixedLocator, FuncFormatter, NullFormatter
from numpy.typing import NDArray

from leakpipe.report.figures.detection import HALF_WIDTH
from leakpipe.report.figures.style import (
    COLUMN,
    Array,
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
from leakpipe.report.wording import percent

TITLE = "Logical fidelity against rounds"
FIRST_FITTED = 2
"""R = 1 is left out of the fit: no error history there. Common practice, no source."""

TICKS = (0.01, 0.02, 0.05, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0)


def draw(patch: PatchReport, place: str) -> Drawing:
    """Draw 1 - 2P of every duration on a log axis, the fit, and the curve without leakage.

    Raises
    ------
    NothingToDraw
        The logical stage has no logical errors.
    """
    failed = patch.array("logical", "logical_error", ("recording",))
    if failed is None or not np.isfinite(failed).any():
        raise NothingToDraw("no logical errors")
    rounds = np.asarray(patch.labels("logical", "rounds"), dtype=float)
    error = patch.array("logical", "logical_error_error", ("recording",))
    error = np.zeros_like(failed) if error is None else np.nan_to_num(error)
    injected = np.asarray(patch.labels("logical", "injected") or np.zeros(len(failed)))
    fidelity = 1 - 2 * failed
    usable = np.isfinite(fidelity) & (fidelity > 0) & (injected == 0)
    figure = canvas(COLUMN, 3.6, TITLE, place)
    axes = figure.subplots()
    axes.set_yscale("log")
    fitted = _fitted(patch, rounds)
    for chosen, hollow in ((usable & fitted, False), (usable & ~fitted, True)):
        # On a log axis a bar that reaches zero has no lower end: cut it just above zero.
        half = np.minimum(2 * HALF_WIDTH * error[chosen], 0.98 * fidelity[chosen])
        points(axes, rounds[chosen], fidelity[chosen], half, color="data", hollow=hollow)
    ends = _curves(patch, axes, rounds[usable])
    hidden = int((np.isfinite(fidelity) & (fidelity <= 0) & (injected == 0)).sum())
    if usable.any():
        _ticks(axes, np.maximum(fidelity - 2 * HALF_WIDTH * error, 0.6 * fidelity)[usable])
    # Labels sit in log units, because that is how far apart they look.
    lowest, highest = (np.log(limit) for limit in axes.get_ylim())
    heights = spread_apart([np.log(height) for _, _, height in ends], 0.08 * (highest - lowest))
    for (words, color, _), height in zip(ends, heights, strict=True):
        end_label(axes, float(rounds.max()), float(np.exp(height)), words, color)
    axes.set_xlabel("rounds R")
    axes.set_ylabel("1 - 2 P(logical error)")
    per_round = percent(patch.estimate("logical", "logical_error_per_round"))
    without = percent(patch.estimate("share", "per_round_without"))
    lost = (
        f" {hidden} durations at or below zero fidelity cannot stand on this axis."
        if hidden
        else ""
    )
    stage = patch.stage("logical")
    reach = "" if stage is None else str(stage.attrs.get("range_of_rounds", ""))
    over = f" over R = {reach}" if reach else ""
    return Drawing(
        figure,
        TITLE,
        f"Points with 95 % intervals; line and band: A (1 - 2 eps)^R fitted{over}. Hollow points "
        "are left out of the fit: at R = 1 there is no error history yet. Dashed: the same device "
        f"without leakage, as far as the share's routes can tell.{lost}",
        f"Logical fidelity falls by {per_round} error per round; without leakage it would be "
        f"{without}.",
    )


def _fitted(patch: PatchReport, rounds: Array) -> NDArray[np.bool_]:
    """Return which recordings the fit used."""
    used = patch.array("logical", "used", ("recording",))
    if used is None:
        return np.asarray(rounds >= FIRST_FITTED)
    return np.asarray(used > 0)


def _measured(patch: PatchReport, axes: Axes) -> tuple[str, str, float] | None:
    """Draw the logical stage's own curve with its band, where it gives one."""
    curve = patch.array("logical", "fit_fidelity", ("rounds_axis",))
    axis = np.asarray(patch.labels("logical", "rounds_axis"), dtype=float)
    if curve is None or not (np.isfinite(curve) & (curve > 0)).any():
        return None
    low = patch.array("logical", "fit_fidelity_low", ("rounds_axis",))
    high = patch.array("logical", "fit_fidelity_high", ("rounds_axis",))
    shown = np.isfinite(curve) & (curve > 0)
    axes.plot(axis[shown], curve[shown], color=LIGHT["data"], linewidth=1.4)
    if low is not None and high is not None:
        band(axes, axis, np.where(low > 0, low, np.nan), high, "data")
    return "measured", "data", float(curve[shown][-1])


def _curves(patch: PatchReport, axes: Axes, rounds: Array) -> list[tuple[str, str, float]]:
    """Draw the fit and the leakage-free curve; return (words, colour, height at the right end)."""
    if not rounds.size:
        return []
    smooth = np.linspace(rounds.min(), rounds.max(), 100)
    amplitude = patch.estimate("logical", "amplitude").value
    measured = _measured(patch, axes)
    ends = [] if measured is None else [measured]
    for stage, name, words, color, style in (
        ("logical", "logical_error_per_round", "measured", "data", "-"),
        ("share", "per_round_without", "without\nleakage", "third", (0, (4, 2))),
    ):
        eps = patch.estimate(stage, name)
        if eps.value is None or amplitude is None or (stage == "logical" and measured):
            continue
        curve = amplitude * (1 - 2 * eps.value) ** smooth
        axes.plot(smooth, curve, color=LIGHT[color], linestyle=style, linewidth=1.4)
        if eps.low is not None and eps.high is not None:
            low, high = (amplitude * (1 - 2 * end) ** smooth for end in (eps.high, eps.low))
            band(axes, smooth, low, high, color)
        ends.append((words, color, float(curve[-1])))
    at = np.asarray(patch.labels("share", "rounds"), dtype=float)
    without = patch.array("share", "fidelity_without", ("recording",))
    if without is not None and at.size == without.size:
        shown = np.isfinite(without) & (without > 0)
        points(axes, at[shown], without[shown], None, color="third", marker="_", zorder=2)
    return ends


def _ticks(axes: Axes, lowest: Array) -> None:
    """Put plain numbers on the log axis, which reaches down to the ends of the bars."""
    low = max(min(float(lowest.min()) * 0.92, 0.9), 1e-3)
    axes.set_ylim(low, 1.08)
    axes.yaxis.set_major_locator(FixedLocator([tick for tick in TICKS if low <= tick]))
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axes.yaxis.set_minor_formatter(NullFormatter())
    axes.minorticks_off()
