"""The logical stage: which shots failed, and the logical error per round."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.codes.events import bits_of, detection_events, logical_parity
from leakpipe.codes.matching import MatchingDecoder, matching_decoder
from leakpipe.config.logical import LogicalSettings
from leakpipe.estimates import Estimate, store
from leakpipe.findings import Finding, with_findings
from leakpipe.logical.per_round import PerRound, fit_per_round
from leakpipe.recordings.shots import BATCHES, Frame, Readings

POOR_FIT = 1e-3
"""Goodness-of-fit probability below which the exponential is called a poor description."""
UNBALANCED = 5.0
"""Standard errors by which starting values may be off balance before it is a finding."""
FEW_DURATIONS = 4
"""Different numbers of rounds below which curvature cannot be seen (common practice, no source)."""
CURVE_POINTS = 100


@dataclass(frozen=True)
class LogicalSums:
    """Outcome of every shot of one recording, in order.

    Attributes
    ----------
    failed
        (shot,) uint8, 1 where the decoded logical value is wrong.
    start
        (shot,) uint8 starting logical value.
    batch
        (shot,) int64.
    """

    failed: NDArray[np.uint8]
    start: NDArray[np.uint8]
    batch: NDArray[np.int64]


def prepare(pilot: Readings, frame: Frame, settings: LogicalSettings) -> MatchingDecoder | None:
    """Return our decoder for recordings without a verdict (or always, if the config says so)."""
    if pilot.verdict is not None and settings.decoder == "verdict":
        return None
    return matching_decoder(frame.layout, frame.basis, frame.rounds)


def partial(readings: Readings, frame: Frame, decoder: MatchingDecoder | None) -> LogicalSums:
    """Return which of some shots failed, by the lab's verdict or our decoder."""
    start = logical_parity(readings.prepared, frame.layout, frame.basis)
    if decoder is None:
        assert readings.verdict is not None
        failed = (readings.verdict > 0).astype(np.uint8)
    else:
        closing = bits_of(readings.final_states, frame.leaked_reads)
        events = detection_events(
            bits_of(readings.states, frame.leaked_reads),
            closing,
            readings.prepared,
            frame.layout,
            frame.basis,
            reset=frame.reset,
        )
        flipped = logical_parity(closing, frame.layout, frame.basis) ^ start
        failed = decoder.decode(events) ^ flipped
    return LogicalSums(failed, start, frame.batch_of(readings.first, readings.shots))


def merge(a: LogicalSums, b: LogicalSums) -> LogicalSums:
    """Join two runs of consecutive shots, `a` before `b`."""
    return LogicalSums(
        np.concatenate([a.failed, b.failed]),
        np.concatenate([a.start, b.start]),
        np.concatenate([a.batch, b.batch]),
    )


def logical(reduced: Sequence[tuple[Frame, LogicalSums]], settings: LogicalSettings) -> xr.Dataset:
    """Estimate the logical error per round.

    Parameters
    ----------
    reduced
        Frame and outcomes per recording of one patch and basis.
    settings
        The `logical` section.

    Returns
    -------
    dataset
        `logical_error` (recording) with `_error` from contiguous batches, the estimates
        `logical_error_per_round`, `amplitude`, `per_start` (start), the fitted curve, scatter and
        goodness of fit.
    """
    frames = [frame for frame, _ in reduced]
    rounds = np.array([frame.rounds for frame in frames], dtype=float)
    plain = np.array([frame.injected is None for frame in frames])
    used = plain & (rounds >= settings.first_round)
    every = [_failure(sums, None) for _, sums in reduced]
    error = np.array([value for value, _ in every])
    spread = np.array([value for _, value in every])
    fit = fit_per_round(rounds[used], 1 - 2 * error[used], (2 * spread[used]) ** 2)
    low, high = (int(rounds[used].min()), int(rounds[used].max())) if used.any() else (0, 0)
    basis = f"logical outcomes of {int(used.sum())} recordings, {low} to {high} rounds"
    per_start = [
        _estimate(
            _fit_start([(f, s) for (f, s), u in zip(reduced, used, strict=True) if u], value), basis
        )
        for value in (0, 1)
    ]
    axis = np.linspace(1, max(rounds.max(), 2), CURVE_POINTS)
    curve = fit.fidelity(axis) if fit else np.full(CURVE_POINTS, np.nan)
    width = _curve_error(fit, axis) if fit else np.full(CURVE_POINTS, np.nan)
    variables: dict[str, Any] = {
        "logical_error": ("recording", error, {"units": "1", "long_name": "logical error"}),
        "logical_error_error": ("recording", spread, {"units": "1"}),
        "used": ("recording", used.astype(np.int8)),
        "fit_fidelity": ("rounds_axis", curve, {"units": "1", "long_name": "logical fidelity"}),
        "fit_fidelity_low": ("rounds_axis", curve - 1.96 * width, {"units": "1"}),
        "fit_fidelity_high": ("rounds_axis", curve + 1.96 * width, {"units": "1"}),
        **store("logical_error_per_round", (), _estimate(fit, basis), units="per round"),
        **store("amplitude", (), _amplitude(fit, basis)),
        **store("per_start", ("start",), per_start, units="per round"),
        "scatter": ((), fit.scatter if fit else np.nan, {"units": "1"}),
        "chi_square": ((), fit.chi_square if fit else np.nan, {"units": "1"}),
        "freedom": ((), fit.freedom if fit else 0, {"units": "1"}),
    }
    out = xr.Dataset(
        variables,
        coords={
            "recording": [frame.name for frame in frames],
            "rounds": ("recording", rounds.astype(int)),
            "shots": ("recording", [frame.shots for frame in frames]),
            "injected": ("recording", (~plain).astype(int)),
            "start": [0, 1],
            "rounds_axis": axis,
        },
        attrs={"range_of_rounds": f"{low} to {high}"},
    )
    return with_findings(out, _findings(reduced, used, fit))


def _failure(sums: LogicalSums, start: int | None) -> tuple[float, float]:
    """Return the logical error and its standard error over contiguous batches.

    With few failures per batch the batch spread is itself uncertain, so the binomial error is the
    least that is quoted.
    """
    keep = np.ones(len(sums.failed), dtype=bool) if start is None else sums.start == start
    failed, batch = sums.failed[keep].astype(float), sums.batch[keep]
    shots = len(failed)
    if shots == 0:
        return float("nan"), float("nan")
    mean = float(failed.mean())
    # Laplace's rule keeps the error of 0 of N finite.
    guess = (failed.sum() + 1) / (shots + 2)
    binomial = float(np.sqrt(guess * (1 - guess) / shots))
    per_batch = np.bincount(batch, weights=failed - mean, minlength=BATCHES)
    filled = len(np.unique(batch))
    if filled < 10:
        return mean, binomial
    sandwich = float(np.sqrt(np.sum(per_batch**2) * filled / (filled - 1)) / shots)
    return mean, max(binomial, sandwich)


def _fit_start(reduced: list[tuple[Frame, LogicalSums]], value: int) -> PerRound | None:
    rows = [(frame.rounds, *_failure(sums, value)) for frame, sums in reduced]
    table = np.array([row for row in rows if np.isfinite(row[1])], dtype=float).reshape(-1, 3)
    if len(table) < 2:
        return None
    return fit_per_round(table[:, 0], 1 - 2 * table[:, 1], (2 * table[:, 2]) ** 2)


def _estimate(fit: PerRound | None, basis: str) -> Estimate:
    if fit is None:
        return Estimate.unknown(
            "needs two or more different numbers of rounds with a logical fidelity above its noise"
        )
    freedom = fit.freedom if fit.scatter > 0 else None
    raw = Estimate.from_error(fit.error_per_round, fit.error, basis, freedom=freedom)
    if raw.low is None or raw.high is None:
        return raw
    # A probability per round of flipping lies between 0 and 1/2.
    return replace(raw, low=max(raw.low, 0.0), high=min(raw.high, 0.5))


def _amplitude(fit: PerRound | None, basis: str) -> Estimate:
    if fit is None:
        return Estimate.unknown("the logical error per round is not determined")
    error = fit.amplitude * float(np.sqrt(fit.covariance[1, 1]))
    return Estimate.from_error(fit.amplitude, error, basis)


def _curve_error(fit: PerRound, rounds: NDArray[np.float64]) -> NDArray[np.float64]:
    value = fit.fidelity(rounds)
    slope = np.stack([-2 * rounds / (1 - 2 * fit.error_per_round), np.ones_like(rounds)]) * value
    variance = np.einsum("ai,ab,bi->i", slope, fit.covariance, slope)
    return np.asarray(np.sqrt(variance))


def _findings(
    reduced: Sequence[tuple[Frame, LogicalSums]], used: NDArray[np.bool_], fit: PerRound | None
) -> list[Finding]:
    findings = []
    durations = {frame.rounds for (frame, _), u in zip(reduced, used, strict=True) if u}
    if len(durations) < FEW_DURATIONS:
        findings.append(
            Finding(
                "few-durations",
                "watch",
                "recordings",
                f"Only {len(durations)} different numbers of rounds (from 2 up): the logical error "
                "per round rests on them alone.",
                {"durations": len(durations)},
            )
        )
    start = np.concatenate([sums.start for _, sums in reduced])
    off = (start.mean() - 0.5) * 2 * np.sqrt(len(start))
    if abs(off) > UNBALANCED:
        findings.append(
            Finding(
                "unbalanced-starts",
                "watch",
                "recordings",
                f"{start.mean():.0%} of the shots start with logical value 1: errors that depend "
                "on the state do not average out.",
                {"fraction": float(start.mean())},
            )
        )
    if fit is not None and fit.freedom > 0 and fit.p_value < POOR_FIT:
        findings.append(
            Finding(
                "fidelity-not-exponential",
                "note",
                "logical error",
                f"The logical fidelity is no single exponential within its shot noise (chi-square "
                f"{fit.chi_square:.0f} for {fit.freedom}): drift between recordings, or leakage "
                f"building up; a scatter of {fit.scatter:.1%} between recordings was added.",
                {"chi_square": fit.chi_square, "freedom": fit.freedom, "scatter": fit.scatter},
            )
        )
    return findings
