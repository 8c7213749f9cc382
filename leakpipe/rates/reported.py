"""The estimates that the rates stage reports: of the code, of roles, of qubits, of checks."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from leakpipe.config.rates import RatesSettings
from leakpipe.estimates import Estimate, store
from leakpipe.rates.correlation import LagFit, kappa
from leakpipe.rates.curves import Curves
from leakpipe.rates.populations import LARGEST_MEMORY
from leakpipe.rates.recurrence import rates_of, settling_time
from leakpipe.rates.rise import RiseFit, amplitude_limit
from leakpipe.rates.roles import ROLES, Role

KNOCK_ON = 0.2
"""Relative systematic of kappa: in a circuit a leaked qubit also sends ordinary errors to checks it
does not touch, which raises the rise but hardly the correlations (kappa .77 to .86 where the
neighbours' outcomes are fully random; rehearsal, distance 3)."""
FREEDOM = 49
"""Degrees of freedom of errors from 50 batches."""

FloatArray = NDArray[Any]


def code_estimates(
    rise: RiseFit,
    same: LagFit | None,
    together: tuple[float, float, str] | None,
    curves: Curves,
    settings: RatesSettings,
) -> dict[Any, Any]:
    """Return relative rise, settling time and kappa of the code."""
    basis = f"mean detection probability of {len(curves.rounds)} interior rounds"
    relative = relative_rise(rise, basis)
    settling = _settling(together, rise)
    ratio = _kappa(rise, same, together, settings, curves.events.shape[2])
    return {
        **store("detection_rise", (), relative, long_name="relative rise of detection"),
        **store("settling_rounds", (), settling, units="rounds"),
        **store("kappa", (), ratio),
        "rise_status": ((), rise.status),
    }


def relative_rise(fit: RiseFit, basis: str) -> Estimate:
    """Return the relative rise with its profile interval, or what is known instead."""
    if fit.status == "no data":
        return Estimate.unknown("too few interior rounds to fit a rise")
    if fit.start <= 0:
        return Estimate.unknown(f"{basis}: the fit leaves no detection at round 0")
    if fit.status == "no rise":
        return Estimate.upper_limit(
            amplitude_limit(fit) / fit.start, f"{basis}: no significant rise"
        )
    if fit.status == "long":
        return Estimate.unknown(
            f"{basis}: the rise has not settled; known is its slope, {fit.slope:.2g} "
            f"+- {fit.slope_error:.1g} per round at the start"
        )
    low, high = fit.relative_low, fit.relative_high
    if not (np.isfinite(low) and np.isfinite(high)):
        ends = [end if np.isfinite(end) else None for end in (low, high)]
        reason = f"{basis}: over before the first fitted rounds, the rise from round 0 is open"
        return Estimate(None, ends[0], ends[1], identifiable=False, basis=reason)
    return Estimate(fit.relative, low, high, basis=basis)


def _settling(together: tuple[float, float, str] | None, rise: RiseFit) -> Estimate:
    if together is None:
        return Estimate.unknown(
            f"neither correlations nor the rise (status: {rise.status}) determine it"
        )
    lam, variance, basis = together
    ends = np.clip(lam + np.array([-1, 1]) * 2.01 * np.sqrt(variance), 0.0, LARGEST_MEMORY)
    low, high = settling_time(ends)
    return Estimate(float(settling_time(lam)), float(low), float(high), basis=basis)


def _kappa(
    rise: RiseFit,
    same: LagFit | None,
    together: tuple[float, float, str] | None,
    settings: RatesSettings,
    checks: int,
) -> Estimate:
    if same is None or together is None or rise.status in ("no data", "no rise", "long"):
        return Estimate.unknown(f"needs a settled rise (status: {rise.status}) and correlations")
    value, error = kappa(
        same,
        rise.amplitude * checks,
        rise.amplitude_error * checks,
        rise.start,
        together[0],
        outcome=settings.observation == "outcome random",
    )
    # The observation model is a choice: half the difference between the two is its systematic.
    other, _ = kappa(
        same,
        rise.amplitude * checks,
        rise.amplitude_error * checks,
        rise.start,
        together[0],
        outcome=settings.observation != "outcome random",
    )
    total = float(np.sqrt(error**2 + ((value - other) / 2) ** 2 + (KNOCK_ON * value) ** 2))
    basis = "same-check correlations, lags 2 to 4, against the rise"
    return Estimate.from_error(value, total, basis, freedom=FREEDOM)


def _interval(value: float, draws: FloatArray, basis: str, low: float, high: float) -> Estimate:
    """Return the estimate whose error is the spread of draws, kept inside its physical range."""
    error = float(np.std(draws, ddof=1))
    raw = Estimate.from_error(value, error, basis, freedom=FREEDOM)
    if raw.low is None or raw.high is None:
        return raw
    return Estimate(
        float(np.clip(value, low, high)),
        float(np.clip(raw.low, low, high)),
        float(np.clip(raw.high, low, high)),
        basis=basis,
    )


def role_estimates(roles: dict[str, Role]) -> dict[Any, Any]:
    """Return steady level, injection, seepage and settling time per role: means over qubits."""
    level: list[Estimate] = []
    injection: list[Estimate] = []
    seepage: list[Estimate] = []
    settling: list[Estimate] = []
    for role in ROLES:
        one = roles[role]
        if one.fit is None:
            unknown = Estimate.unknown(one.basis)
            for target in (level, injection, seepage, settling):
                target.append(unknown)
            continue
        fit = one.fit
        g, s = rates_of(fit.level, fit.memory)
        g_draw, s_draw = rates_of(one.levels, one.memories)
        count = len(fit.level)
        basis = f"mean of {count} {role} qubits: {one.basis}"
        level.append(_interval(fit.level.mean(), np.nanmean(one.levels, axis=1), basis, 0, 1))
        injection.append(_interval(g.mean(), np.nanmean(g_draw, axis=1), basis, 0, 1))
        seepage.append(_interval(s.mean(), np.nanmean(s_draw, axis=1), basis, 0, 1))
        spread = float(np.std(np.nanmean(one.memories, axis=1), ddof=1))
        settling.append(_tau(float(fit.memory.mean()), spread, basis))
    dims = ("role",)
    return {
        **store("steady_leakage", dims, level),
        **store("injection", dims, injection, units="per round"),
        **store("seepage", dims, seepage, units="per round"),
        **store("role_settling_rounds", dims, settling, units="rounds"),
    }


def _tau(memory: float, error: float, basis: str) -> Estimate:
    ends = np.clip(memory + np.array([-1, 1]) * 2.01 * error, 0.0, LARGEST_MEMORY)
    low, high = settling_time(ends)
    if ends[1] >= LARGEST_MEMORY:
        return Estimate(
            None,
            float(low),
            None,
            identifiable=False,
            basis=f"{basis}; open above: still building up",
        )
    return Estimate(float(settling_time(memory)), float(low), float(high), basis=basis)


def qubit_estimates(roles: dict[str, Role]) -> dict[Any, Any]:
    """Return the same per qubit, with the draws of the rates and who is the worst."""
    columns: dict[str, list[Estimate]] = {
        name: []
        for name in (
            "qubit_steady_leakage",
            "qubit_injection",
            "qubit_seepage",
            "qubit_settling_rounds",
        )
    }
    injection_draw, seepage_draw, worst = [], [], []
    for role in ROLES:
        one = roles[role]
        g_draw, s_draw = rates_of(one.levels, one.memories)
        injection_draw.append(np.clip(g_draw, 0, 1))
        seepage_draw.append(np.clip(s_draw, 0, 1))
        worst.append(_worst(one.levels))
        row = 0
        for column, reason in enumerate(one.reasons):
            if one.fit is None or reason:
                for values in columns.values():
                    values.append(Estimate.unknown(reason or one.basis))
                continue
            if one.unsettled[row]:
                still = f"still building up after {one.longest} rounds, the longest run"
                for values in columns.values():
                    values.append(Estimate.unknown(still))
                row += 1
                continue
            fit, p, lam = one.fit, one.fit.level[row], one.fit.memory[row]
            basis = one.basis
            if fit.own_weight[row] < 0.5:
                basis += "; settling mostly shared with the other qubits of its role"
            g, s = rates_of(p, lam)
            columns["qubit_steady_leakage"].append(
                _interval(float(p), one.levels[:, column], basis, 0, 1)
            )
            columns["qubit_injection"].append(_interval(float(g), g_draw[:, column], basis, 0, 1))
            columns["qubit_seepage"].append(_interval(float(s), s_draw[:, column], basis, 0, 1))
            spread = float(np.sqrt(fit.covariance[len(fit.level) + row, len(fit.level) + row]))
            columns["qubit_settling_rounds"].append(_tau(float(lam), spread, basis))
            row += 1
    out: dict[Any, Any] = {}
    for name, values in columns.items():
        units = "rounds" if name.endswith("rounds") else "per round"
        out |= store(name, ("qubit",), values, units="1" if "steady" in name else units)
    out["injection_draw"] = (("draw", "qubit"), np.hstack(injection_draw), {"units": "per round"})
    out["seepage_draw"] = (("draw", "qubit"), np.hstack(seepage_draw), {"units": "per round"})
    out["worst_probability"] = ("qubit", np.concatenate(worst), {"units": "1"})
    return out


def _worst(levels: FloatArray) -> FloatArray:
    """Return the probability of each qubit to leak most of its role."""
    if not np.isfinite(levels).any():
        return np.full(levels.shape[1], np.nan)
    top = np.nanargmax(levels, axis=1)
    return np.bincount(top, minlength=levels.shape[1]) / len(levels)


def check_estimates(fits: list[RiseFit]) -> dict[Any, Any]:
    """Return start, relative rise and settling time of each check, and its status word."""
    start: list[Estimate] = []
    rise: list[Estimate] = []
    settling: list[Estimate] = []
    for fit in fits:
        if fit.status == "no data":
            unknown = Estimate.unknown("too few interior rounds")
            for target in (start, rise, settling):
                target.append(unknown)
            continue
        basis = "its detection probability over rounds"
        error = float(np.sqrt(max(np.array([1, -1, 0]) @ fit.covariance @ np.array([1, -1, 0]), 0)))
        start.append(Estimate.from_error(fit.start, error, basis, freedom=FREEDOM))
        rise.append(relative_rise(fit, basis))
        if fit.status == "settled":
            settling.append(Estimate(fit.tau, fit.tau_low, fit.tau_high, basis=basis))
        else:
            settling.append(Estimate.unknown(f"{basis}: {fit.status}"))
    return {
        **store("check_start", ("check",), start),
        **store("check_rise", ("check",), rise),
        **store("check_settling_rounds", ("check",), settling, units="rounds"),
        "check_status": ("check", np.array([fit.status for fit in fits], dtype=str)),
    }
