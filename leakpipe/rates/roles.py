"""Leaked populations of data and of measure qubits: what is fitted to which readings."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.config.rates import RatesSettings
from leakpipe.rates.populations import START_DEVIATION, RoleFit, Series, fit_role

ROLES = ("data", "measure")
HALF = 0.5
LEAST_EXCITATION = 5e-4
EXCITATION_PER_DECAY = 0.05
"""Probability 1 to 2 during the readout over that of 1 to 0: .02, .04 and .09 on the good, average
and poor reference devices of the prototype study."""
START_RANGE = 3.0
"""Standard errors (root of the gain in chi-square) by which a free population at round 0 must fit
better than a nearly cold start."""

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Role:
    """One role's fit and draws, or the reason why there is none.

    `unsettled` tells which fitted qubits had not covered half of their way to the steady level by
    the end of the longest run: level and memory then cannot be told apart.
    """

    names: tuple[str, ...]
    fit: RoleFit | None
    levels: FloatArray
    memories: FloatArray
    basis: str
    reasons: tuple[str, ...]
    unsettled: NDArray[np.bool_]
    longest: int


def measure_role(readout: xr.Dataset, settings: RatesSettings, rng: np.random.Generator) -> Role:
    """Fit the measure qubits to their leaked readings, pooled over recordings round by round."""
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
        rounds=np.asarray(rows + 1.0, dtype=np.float64),
        value=value[rows, columns],
        variance=1 / total[rows, columns],
        cluster_scores=deviation[:, :, rows, columns].reshape(-1, len(rows)),
        replicas=copies[:, rows, columns],
    )
    basis = f"leaked readings of {len(np.unique(rows))} rounds, {int(plain.sum())} recordings"
    excitation = _excitation(readout, names, settings)
    return _fitted(series, names, usable, reasons, basis, None, settings, rng, excitation)


def data_role(
    readout: xr.Dataset,
    together: tuple[float, float, str] | None,
    measure: Role,
    settings: RatesSettings,
    rng: np.random.Generator,
) -> Role:
    """Fit the data qubits to their closing readout after every number of rounds.

    Parameters
    ----------
    readout
        Dataset of the readout stage.
    together
        lam of the code, its variance and basis, from rise and correlations; None without them.
    measure
        Fit of the measure qubits: their leakage is in the correlations too.
    settings, rng
        The `rates` section, and the source of the draws.
    """
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
    excitation = _excitation(readout, names, settings)
    return _fitted(series, names, usable, reasons, basis, prior, settings, rng, excitation)


def _even_error(error: FloatArray, shots: NDArray[np.int64]) -> FloatArray:
    """Return shot errors from one variance per shot and qubit, over (recording, ..., qubit).

    With few leaked readings an observation's own variance grows with its value, so that weights
    from it favour what fluctuated low: 20 % too low for 4000 shots at a population of 0.14 %.
    """
    over = tuple(range(error.ndim - 1))
    number = np.broadcast_to(shots.reshape(-1, *(1,) * (error.ndim - 1)), error.shape)
    per_shot = np.nanmean(np.where(error > 0, error**2 * number, np.nan), axis=over)
    return np.where(np.isfinite(error), np.sqrt(per_shot / number), np.nan)


def _excitation(readout: xr.Dataset, names: tuple[str, ...], settings: RatesSettings) -> float:
    """Return how large the excitation from 1 to 2 during the readout may be, for a role."""
    if settings.readout_excitation is not None:
        return settings.readout_excitation
    decay = readout.sel(qubit=list(names))["decay"].values if "decay" in readout else np.zeros(0)
    known = decay[np.isfinite(decay)]
    return max(LEAST_EXCITATION, EXCITATION_PER_DECAY * float(known.mean()) if len(known) else 0.0)


def _mixing(memory: float, measure: Role, closing: FloatArray) -> float:
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
) -> Role:
    empty = np.full((settings.draws, len(names)), np.nan)
    texts = tuple(reason or "leaked population not identifiable" for reason in reasons)
    nothing = np.zeros(0, dtype=bool)
    return Role(names, None, empty, empty, texts[0] if texts else "no qubits", texts, nothing, 0)


def _fitted(
    series: Series,
    names: tuple[str, ...],
    usable: NDArray[np.bool_],
    reasons: list[str],
    basis: str,
    prior: tuple[float, float] | None,
    settings: RatesSettings,
    rng: np.random.Generator,
    excitation: float,
) -> Role:
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
    fit = fit_role(series, count, memory_prior=prior, free_start=False, excitation=excitation)
    warm = fit_role(series, count, memory_prior=prior, free_start=True, excitation=excitation)
    # A flat population may be one that settles at once or one that started settled. The nearly
    # cold start is the default; a warm one must fit better by far.
    pulled = (fit.start / START_DEVIATION) ** 2
    if fit.chi_square + pulled - warm.chi_square > START_RANGE**2:
        fit, basis = warm, f"{basis}; with a leaked population at round 0"
    levels, memories = fit.draws(settings.draws, rng)
    full_levels = np.full((settings.draws, len(names)), np.nan)
    full_memories = full_levels.copy()
    full_levels[:, usable], full_memories[:, usable] = levels, memories
    longest = int(series.rounds.max())
    unsettled = fit.memory**longest > HALF
    return Role(names, fit, full_levels, full_memories, basis, tuple(reasons), unsettled, longest)


def expected_leaked(role: Role, rounds: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the role's mean leaked population per round with a 95 % band."""
    if role.fit is None:
        empty = np.full(len(rounds), np.nan)
        return empty, empty, empty
    fit = role.fit

    def mean(level: FloatArray, memory: FloatArray) -> FloatArray:
        power = memory[..., None] ** rounds
        return np.asarray(np.nanmean(level[..., None] * (1 - (1 - fit.start) * power), axis=-2))

    draws = mean(role.levels, role.memories)
    low, high = np.percentile(draws, [2.5, 97.5], axis=0)
    return mean(fit.level, fit.memory), low, high
