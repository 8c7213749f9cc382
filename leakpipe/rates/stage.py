"""The rates stage: injection and seepage per qubit from populations, rise and correlations."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.codes.layout import Layout
from leakpipe.config.rates import RatesSettings
from leakpipe.estimates import Estimate, store
from leakpipe.findings import Finding, with_findings
from leakpipe.rates.correlation import FIRST_LAG, LagFit, fit_lags, kappa
from leakpipe.rates.populations import LARGEST_MEMORY, RoleFit, Series, fit_role
from leakpipe.rates.recurrence import rates_of, settling_time
from leakpipe.rates.rise import RiseFit, amplitude_limit, fit_rise
from leakpipe.rates.transport import transport_excess

ROLES = ("data", "measure")
CORRELATED = 3.0
"""z of the summed lag >= 2 covariance above which leakage is seen in it (prototype study)."""
SIGNIFICANT = 2.0
KNOCK_ON = 0.2
"""Relative systematic of kappa: in a circuit a leaked qubit also sends ordinary errors to checks it
does not touch, which raises the rise but hardly the correlations (kappa .77 to .86 where the
neighbours' outcomes are fully random; rehearsal, distance 3)."""
FREEDOM = 49
"""Degrees of freedom of errors from 50 batches."""
START_RANGE = 3.0
"""Standard errors (root of the gain in chi-square) by which a free population at round 0 must fit
better than a nearly cold start."""
BAD_QUBIT = 0.9
"""Probability of being the worst of its role above which a qubit is named."""
BAD_FACTOR = 2.0
"""A named qubit leaks at least this many times the median of its role."""

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class _Role:
    """One role's fit and draws, or the reason why there is none."""

    names: tuple[str, ...]
    fit: RoleFit | None
    levels: FloatArray
    memories: FloatArray
    basis: str
    reasons: tuple[str, ...]


def rates(
    detection: xr.Dataset,
    readout: xr.Dataset,
    layout: Layout,
    settings: RatesSettings,
    seed: int,
) -> xr.Dataset:
    """Estimate rise, correlations, and injection and seepage per qubit and role.

    Parameters
    ----------
    detection, readout
        Datasets of those stages.
    layout
        Code layout.
    settings
        The `rates` section.
    seed
        Seed of the draws that later stages use.

    Returns
    -------
    dataset
        Estimates per code, role, qubit and check; curves for the figures; draws.
    """
    rng = np.random.default_rng(seed)
    curves = _interior(detection, settings.boundary_rounds + _extra_layers(detection))
    mean_rise = _fit_mean(curves)
    per_check = [_fit_mean(curves, check) for check in range(len(layout.measure))]
    same, pairs = _lag_fits(detection, mean_rise)
    together = _memory_of_code(mean_rise, same, pairs)
    measure = _role_measure(readout, settings, rng)
    data = _role_data(readout, together, measure, settings, rng)
    roles = {"data": data, "measure": measure}
    variables: dict[str, Any] = {}
    variables |= _code_estimates(mean_rise, same, together, curves, settings)
    variables |= _role_estimates(roles)
    variables |= _qubit_estimates(roles)
    variables |= _check_estimates(per_check)
    variables |= _curves(detection, curves, mean_rise, same, pairs)
    transport, transport_z = transport_excess(detection, readout, layout)
    variables |= store("transport", (), transport, units="per leaked reading")
    variables["transport_z"] = ((), transport_z, {"units": "1"})
    rounds = detection["round"].values.astype(float)
    expected = [_expected(roles[role], rounds) for role in ROLES]
    for position, suffix in enumerate(("", "_low", "_high")):
        variables[f"expected_leaked{suffix}"] = (
            ("role", "round"),
            np.stack([one[position] for one in expected]),
            {"units": "1"},
        )
    qubits = [*layout.data, *layout.measure]
    out = xr.Dataset(
        variables,
        coords={
            "qubit": qubits,
            "qubit_role": (
                "qubit",
                ["data"] * len(layout.data) + ["measure"] * len(layout.measure),
            ),
            "role": list(ROLES),
            "check": list(layout.measure),
            "round": detection["round"].values,
            "layer": detection["layer"].values,
            "weight": np.unique(layout.weights),
            "lag": detection["lag"].values,
        },
        attrs={"convention": "discrete, per round: p[r+1] = p[r] + G (1 - p[r]) - S p[r]"},
    )
    return with_findings(out, _findings(out, mean_rise, same, transport_z, layout))


def _extra_layers(detection: xr.Dataset) -> int:
    """Return 1 without reset, where an event compares rounds two apart, else 0.

    A check's value is then the change of a bit, an event the change of that: m_r xor m_(r-2). The
    first interior layer and the first lag free of ordinary errors come one later.
    """
    return 0 if detection.attrs.get("reset", 1) else 1


@dataclass(frozen=True)
class _Curves:
    """Interior detection counts pooled over recordings."""

    rounds: FloatArray
    layers: NDArray[np.int64]
    events: FloatArray
    trials: FloatArray


def _interior(detection: xr.Dataset, boundary: int) -> _Curves:
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
    return _Curves(layers + 1.0, layers, events[:, layers], trials[:, layers])


def _fit_mean(curves: _Curves, check: int | None = None) -> RiseFit:
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


def _lag_fits(detection: xr.Dataset, rise: RiseFit) -> tuple[LagFit | None, LagFit | None]:
    """Fit the leakage law to same-check and to pair covariances."""
    products = detection["products"].values.astype(float)
    block_products = detection["block_products"].values.astype(float)
    blocks = detection["blocks"].values.astype(float)
    same = detection["early"].values == detection["late"].values
    rounds = detection["round"].values.astype(float)
    memory = np.exp(-1 / rise.tau) if rise.status in ("settled", "long") else 0.8
    fits: list[LagFit | None] = [None, None]
    extra = _extra_layers(detection)
    # The growth of the early round's population uses lam itself: iterate.
    for _ in range(3):
        growth = np.where(rounds > 1 + extra, 1 - memory**rounds, 0.0)
        fits = [
            fit_lags(products[:, mask], block_products[:, mask], blocks, growth, FIRST_LAG + extra)
            for mask in (same, ~same)
        ]
        found = [fit for fit in fits if fit is not None and fit.significance > CORRELATED]
        if not found:
            break
        memory = float(np.clip(found[0].memory, 0.05, 0.98))
    return fits[0], fits[1]


def _memory_of_code(
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
        variances.append(best.memory_error**2)
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


def _role_measure(readout: xr.Dataset, settings: RatesSettings, rng: np.random.Generator) -> _Role:
    names = tuple(str(name) for name in readout["measure"].values)
    usable, reasons = _usable(readout, names)
    plain = readout["injected"].values == 0
    leaked = readout["leaked"].values[plain]
    error = _even_error(readout["leaked_shot_error"].values[plain], readout["shots"].values[plain])
    batches = readout["leaked_batch"].values[plain]
    replicas = readout["leaked_replica"].values[:, plain]
    if not usable.any() or not plain.any():
        return _no_role(names, reasons, settings)
    finite = np.isfinite(leaked) & (error > 0)
    weight = np.where(finite, 1 / np.where(finite, error, 1.0) ** 2, 0.0)
    # One value per (round, qubit): recordings pooled by their inverse shot variance.
    total = weight.sum(axis=0)
    rows, columns = np.nonzero((total > 0) & usable)
    share = weight / np.where(total > 0, total, 1.0)
    value = np.nansum(np.where(finite, leaked, 0) * share, axis=0)
    copies = np.nansum(np.where(finite, replicas, 0) * share, axis=1)
    count = np.isfinite(batches).sum(axis=1, keepdims=True)
    deviation = (
        np.where(np.isfinite(batches), batches - leaked[:, None], 0.0)
        * share[:, None]
        / np.maximum(count, 1)
    )
    series = Series(
        qubit=columns,
        rounds=rows + 1.0,
        value=value[rows, columns],
        variance=1 / total[rows, columns],
        cluster_scores=deviation[:, :, rows, columns].reshape(-1, len(rows)),
        replicas=copies[:, rows, columns],
    )
    basis = f"leaked readings of {len(np.unique(rows))} rounds, {int(plain.sum())} recordings"
    return _fitted(series, names, usable, reasons, basis, None, settings, rng)


def _role_data(
    readout: xr.Dataset,
    together: tuple[float, float, str] | None,
    measure: _Role,
    settings: RatesSettings,
    rng: np.random.Generator,
) -> _Role:
    names = tuple(str(name) for name in readout["data"].values)
    usable, reasons = _usable(readout, names)
    plain = np.flatnonzero(readout["injected"].values == 0)
    value = readout["closing_leaked"].values[plain]
    shots = readout["shots"].values[plain]
    error = _even_error(readout["closing_leaked_shot_error"].values[plain], shots)
    if not usable.any() or not len(plain):
        return _no_role(names, reasons, settings)
    rows, columns = np.nonzero(np.isfinite(value) & (error > 0) & usable)
    batches = readout["closing_leaked_batch"].values[plain]
    count = np.isfinite(batches).sum(axis=1, keepdims=True)
    deviation = np.where(np.isfinite(batches), batches - value[:, None], 0.0)
    deviation = deviation / np.maximum(count, 1)
    scores = np.zeros((len(plain) * deviation.shape[1], len(rows)))
    for position, (row, column) in enumerate(zip(rows, columns, strict=True)):
        here = slice(row * deviation.shape[1], (row + 1) * deviation.shape[1])
        scores[here, position] = deviation[row, :, column]
    series = Series(
        qubit=columns,
        rounds=readout["rounds"].values[plain][rows].astype(float),
        value=value[rows, columns],
        variance=error[rows, columns] ** 2,
        cluster_scores=scores,
        replicas=readout["closing_leaked_replica"].values[:, plain][:, rows, columns],
    )
    durations = len(np.unique(series.rounds))
    basis = f"closing readout after {durations} different numbers of rounds"
    prior = None
    if together is not None:
        prior = (together[0], together[1] + _mixing(together[0], measure, value) ** 2)
        basis += f"; {together[2]}"
    elif durations < 2:
        reason = "one number of rounds and no correlations: settling and steady level not separable"
        return _no_role(names, [reason] * len(names), settings)
    return _fitted(series, names, usable, reasons, basis, prior, settings, rng)


def _even_error(error: FloatArray, shots: NDArray[np.int64]) -> FloatArray:
    """Return shot errors from one variance per shot and qubit, over (recording, ..., qubit).

    With few leaked readings an observation's own variance grows with its value, so that weights
    from it favour what fluctuated low: 20 % too low for 4000 shots at a population of 0.14 %.
    """
    over = tuple(range(error.ndim - 1))
    number = np.broadcast_to(shots.reshape(-1, *(1,) * (error.ndim - 1)), error.shape)
    per_shot = np.nanmean(np.where(error > 0, error**2 * number, np.nan), axis=over)
    return np.where(np.isfinite(error), np.sqrt(per_shot / number), np.nan)


def _mixing(memory: float, measure: _Role, closing: FloatArray) -> float:
    """Return how far leaked measure qubits may pull the lam of the correlations off the data's.

    Correlations hold the leakage of both roles, each weighted by about its population.
    """
    if measure.fit is None:
        return 0.05
    level = max(float(measure.fit.level.mean()), 0.0)
    other = max(float(np.nanmean(closing)), 1e-5)
    lam = measure.fit.mean_memory
    # An episode of lam near 0 leaves nothing at lags of 2 and more.
    weight = level * lam**2 / (level * lam**2 + other * memory**2)
    return abs(lam - memory) * weight


def _usable(readout: xr.Dataset, names: tuple[str, ...]) -> tuple[NDArray[np.bool_], list[str]]:
    picked = readout.sel(qubit=list(names))
    return picked["usable"].values.astype(bool), [str(r) for r in picked["usable_reason"].values]


def _no_role(
    names: tuple[str, ...], reasons: list[str] | tuple[str, ...], settings: RatesSettings
) -> _Role:
    empty = np.full((settings.draws, len(names)), np.nan)
    texts = tuple(reason or "leaked population not identifiable" for reason in reasons)
    return _Role(names, None, empty, empty, texts[0] if texts else "no qubits", texts)


def _fitted(
    series: Series,
    names: tuple[str, ...],
    usable: NDArray[np.bool_],
    reasons: list[str],
    basis: str,
    prior: tuple[float, float] | None,
    settings: RatesSettings,
    rng: np.random.Generator,
) -> _Role:
    place = np.cumsum(usable) - 1
    series = Series(
        place[series.qubit],
        series.rounds,
        series.value,
        series.variance,
        series.cluster_scores,
        series.replicas,
    )
    count = int(usable.sum())
    excitation = settings.readout_excitation
    fit = fit_role(series, count, memory_prior=prior, free_start=False, excitation=excitation)
    warm = fit_role(series, count, memory_prior=prior, free_start=True, excitation=excitation)
    # A flat population may be one that settles at once or one that started settled. The nearly
    # cold start is the default; a warm one must fit better by far.
    if fit.chi_square - warm.chi_square > START_RANGE**2:
        fit, basis = warm, f"{basis}; with a leaked population at round 0"
    levels, memories = fit.draws(settings.draws, rng)
    full_levels = np.full((settings.draws, len(names)), np.nan)
    full_memories = full_levels.copy()
    full_levels[:, usable], full_memories[:, usable] = levels, memories
    return _Role(names, fit, full_levels, full_memories, basis, tuple(reasons))


def _code_estimates(
    rise: RiseFit,
    same: LagFit | None,
    together: tuple[float, float, str] | None,
    curves: _Curves,
    settings: RatesSettings,
) -> dict[Any, Any]:
    basis = f"mean detection probability of {len(curves.rounds)} interior rounds"
    if rise.status == "no data":
        relative = Estimate.unknown("too few interior rounds to fit a rise")
    elif rise.status == "no rise":
        relative = Estimate.upper_limit(
            amplitude_limit(rise) / rise.start, f"{basis}: no significant rise"
        )
    elif rise.status == "long":
        relative = Estimate.unknown(f"{basis}: the rise has not settled, only its slope is known")
    else:
        relative = Estimate.from_error(rise.relative, rise.relative_error, basis, freedom=FREEDOM)
    settling = _settling(together, rise)
    ratio = _kappa(rise, same, together, settings, curves.events.shape[2])
    return {
        **store("detection_rise", (), relative, long_name="relative rise of detection"),
        **store("settling_rounds", (), settling, units="rounds"),
        **store("kappa", (), ratio),
        "rise_status": ((), rise.status),
    }


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


def _role_estimates(roles: dict[str, _Role]) -> dict[Any, Any]:
    level, injection, seepage, settling = [], [], [], []
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


def _qubit_estimates(roles: dict[str, _Role]) -> dict[Any, Any]:
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


def _check_estimates(fits: list[RiseFit]) -> dict[Any, Any]:
    start, rise, settling = [], [], []
    for fit in fits:
        if fit.status == "no data":
            unknown = Estimate.unknown("too few interior rounds")
            for target in (start, rise, settling):
                target.append(unknown)
            continue
        basis = "its detection probability over rounds"
        error = float(np.sqrt(max(np.array([1, -1, 0]) @ fit.covariance @ np.array([1, -1, 0]), 0)))
        start.append(Estimate.from_error(fit.start, error, basis, freedom=FREEDOM))
        if fit.status in ("settled", "short", "falling"):
            rise.append(
                Estimate.from_error(fit.relative, fit.relative_error, basis, freedom=FREEDOM)
            )
        else:
            rise.append(Estimate.unknown(f"{basis}: {fit.status}"))
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


def _curves(
    detection: xr.Dataset,
    curves: _Curves,
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
        own = _Curves(
            curves.rounds, curves.layers, curves.events[:, :, mask], curves.trials[:, :, mask]
        )
        one = _fit_mean(own)
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


def _expected(role: _Role, rounds: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the role's mean leaked population per round with a 95 % band."""
    if role.fit is None:
        empty = np.full(len(rounds), np.nan)
        return empty, empty, empty
    fit = role.fit

    def mean(level: FloatArray, memory: FloatArray) -> FloatArray:
        power = memory[..., None] ** rounds
        return np.nanmean(level[..., None] * (1 - (1 - fit.start) * power), axis=-2)

    draws = mean(role.levels, role.memories)
    low, high = np.percentile(draws, [2.5, 97.5], axis=0)
    return mean(fit.level, fit.memory), low, high


def _findings(
    out: xr.Dataset, rise: RiseFit, same: LagFit | None, transport_z: float, layout: Layout
) -> list[Finding]:
    findings = []
    if rise.status in ("long", "no rise", "falling"):
        words = {
            "long": "the detection probability has not settled by the longest run",
            "no rise": "the detection probability does not rise significantly over rounds",
            "falling": "the detection probability falls over rounds: no leakage building up",
        }
        findings.append(
            Finding(
                f"rise-{rise.status.replace(' ', '-')}",
                "note",
                "code",
                f"The rise: {words[rise.status]}.",
            )
        )
    if same is not None and rise.status == "settled" and same.significance < CORRELATED:
        findings.append(
            Finding(
                "rise-without-correlation",
                "watch",
                "code",
                "The detection probability rises but events two and more rounds apart are not "
                "correlated: heating or a boundary transient rather than leakage.",
                {"z": same.significance},
            )
        )
    for role in ROLES:
        mask = out["qubit_role"].values == role
        levels = out["qubit_steady_leakage"].values[mask]
        if not np.isfinite(levels).any():
            continue
        chance = out["worst_probability"].values[mask]
        at = int(np.nanargmax(chance))
        median = float(np.nanmedian(levels))
        if chance[at] > BAD_QUBIT and levels[at] > BAD_FACTOR * median and levels[at] > 0:
            name = str(out["qubit"].values[mask][at])
            findings.append(
                Finding(
                    "leakiest-qubit",
                    "act",
                    name,
                    f"{name} leaks most of the {role} qubits: steady level {levels[at]:.2%}, "
                    f"{levels[at] / max(median, 1e-9):.1f} times their median "
                    f"({chance[at]:.0%} sure it is the worst). Its gates are with "
                    f"{', '.join(layout.neighbours(name))}.",
                    {
                        "steady_leakage": float(levels[at]),
                        "median": median,
                        "probability": float(chance[at]),
                    },
                )
            )
    if transport_z > CORRELATED:
        findings.append(
            Finding(
                "leakage-moves",
                "act",
                "code",
                "After a leaked reading its neighbours end leaked more often than alone by chance "
                f"(z = {transport_z:.1f}): leakage moves between qubits.",
                {"z": transport_z},
            )
        )
    return findings
