"""The twin: the fitted device simulated with and without injection, decoded alike.

The twin has the fitted injection (per gate) and seepage of every qubit. Its ordinary errors are set
by what the detection events show: each check's readout error by the correlation of its events in
successive rounds (a wrong reading makes two), one common factor on gate and idling errors by the
mean detection probability. What a leaked
partner does to a qubit is not known from the data alone, so both published pictures are simulated:
a phase-type flip with probability 1/2, and full depolarisation. Their spread is the twin's model
error. Its own simulator, not the estimator's formulas, says what leakage costs; it is a cross-check
and a systematic, never the only number.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from leakpipe.codes.events import bits_of, detection_events, logical_parity
from leakpipe.codes.layout import Basis, Layout
from leakpipe.codes.matching import MatchingDecoder, matching_decoder
from leakpipe.logical.per_round import fit_per_round
from leakpipe.rehearsal.memory import MemoryShots, simulate
from leakpipe.rehearsal.noise import MemoryNoise, gates_per_round

FloatArray = NDArray[np.float64]

ORDINARY = MemoryNoise(single_qubit=1e-3, two_qubit=6e-3, idle=2e-3, measurement=2e-2)
"""Usual error levels (common practice, no source); a common factor is fitted."""
MATCH_STEPS = 6
MATCH_SHOTS = 8192
MATCH_ROUNDS = 12
LEAST_ERROR = 1e-4
CONSEQUENCES = (0.0, 1.0)
"""Part of the strikes of a leaked partner that depolarise fully: the two pictures."""
BLOCK_SHOTS = 4096


@dataclass(frozen=True)
class Twin:
    """Outcome of a twin.

    Attributes
    ----------
    share
        Mean over the consequences.
    statistical
        Its standard error from the simulated shots.
    spread
        Half the difference between the consequences.
    per_round
        (consequence, 2): eps with and without injection.
    detection
        Mean detection probability of the twin, and the observed one it was set to.
    """

    share: float
    statistical: float
    spread: float
    per_round: FloatArray
    detection: tuple[float, float]


def device(
    layout: Layout, injection: FloatArray, seepage: FloatArray, *, depolarise: float
) -> MemoryNoise:
    """Return ordinary noise with the fitted leakage of every qubit.

    Parameters
    ----------
    layout
        Code layout.
    injection, seepage
        (data + measure,) per round in the discrete convention; NaN counts as none.
    depolarise
        Consequence of a leaked partner.
    """
    g = np.clip(np.nan_to_num(injection), 0.0, 0.5)
    # In the simulator seepage acts before the round's gates: S = s (1 - G).
    s = np.clip(np.nan_to_num(seepage, nan=1.0) / (1 - g), 0.0, 1.0)
    per_gate = 1 - (1 - g) ** (1 / gates_per_round(layout))
    return replace(ORDINARY, injection=per_gate, seepage=s, depolarise=depolarise)


@dataclass(frozen=True)
class Observed:
    """What the twin's ordinary errors are set to.

    Attributes
    ----------
    detection
        (check,) detection probability over interior rounds.
    successive
        (check,) covariance of a check's events in successive interior rounds.
    """

    detection: FloatArray
    successive: FloatArray

    @property
    def reading(self) -> FloatArray:
        """(check,) probability of what flips one value of a check and not the next.

        1 - 2 d multiplies over independent causes; the exclusive or of two successive events
        misses what flips the value between them, so (1 - 2 d)^2 / (1 - 2 d_xor) = (1 - 2 q)^2.
        """
        d = self.detection
        either = 2 * (d - self.successive - d**2)
        ratio = (1 - 2 * d) ** 2 / np.maximum(1 - 2 * either, 1e-6)
        return np.asarray((1 - np.sqrt(np.clip(ratio, 0.0, 1.0))) / 2)


def match_detection(
    noise: MemoryNoise,
    layout: Layout,
    basis: Basis,
    observed: Observed,
    rng: np.random.Generator,
    *,
    reset: bool,
) -> tuple[MemoryNoise, float]:
    """Set readout errors and the factor on other errors until events look as observed.

    Parameters
    ----------
    noise
        Noise with leakage.
    observed
        Detection probability and successive covariance of each check.
    rng
        Randomness.
    reset
        Whether measure qubits are reset.

    Returns
    -------
    noise, detection
        Noise, and the twin's mean detection probability.
    """
    data = len(layout.data)
    factor, flips = 1.0, np.full(data + len(layout.measure), 2e-2)
    mean = 0.0
    for _ in range(MATCH_STEPS):
        now = _scaled(noise, factor, flips)
        shots = simulate(layout, basis, MATCH_ROUNDS, MATCH_SHOTS, now, rng, reset=reset)
        found = _observe(_events(shots, layout, basis, reset)[:, 1:MATCH_ROUNDS])
        mean = float(found.detection.mean())
        change = observed.reading - found.reading
        flips[data:] = np.clip(flips[data:] + change, LEAST_ERROR, 0.3)
        flips[:data] = flips[data:].mean()
        # -ln(1 - 2 d) / 2 adds over causes; the reading's part is -ln(1 - 2 q).
        wanted = _other(observed.detection, observed.reading)
        factor *= float(np.clip(wanted / max(_other(found.detection, found.reading), 1e-6), 0.3, 3))
    return _scaled(noise, factor, flips), mean


def _other(detection: FloatArray, reading: FloatArray) -> float:
    """Return the mean of what makes events other than wrong readings."""
    total = -np.log(1 - 2 * np.minimum(detection, 0.49)) / 2
    return float(np.mean(np.maximum(total + np.log(1 - 2 * np.minimum(reading, 0.49)), 1e-5)))


def _observe(events: NDArray[np.uint8]) -> Observed:
    """Return means and successive covariances of interior events (shot, layer, check)."""
    both = (events[:, :-1] & events[:, 1:]).mean(axis=(0, 1))
    early, late = events[:, :-1].mean(axis=(0, 1)), events[:, 1:].mean(axis=(0, 1))
    return Observed(events.mean(axis=(0, 1)), both - early * late)


def _scaled(noise: MemoryNoise, factor: float, flips: FloatArray) -> MemoryNoise:
    return replace(
        noise,
        single_qubit=np.minimum(np.asarray(ORDINARY.single_qubit) * factor, 0.3),
        two_qubit=np.minimum(np.asarray(ORDINARY.two_qubit) * factor, 0.3),
        idle=np.minimum(np.asarray(ORDINARY.idle) * factor, 0.3),
        measurement=flips,
    )


def run_twin(
    layout: Layout,
    basis: Basis,
    rounds: Sequence[int],
    injection: FloatArray,
    seepage: FloatArray,
    observed: Observed,
    shots: int,
    rng: np.random.Generator,
    *,
    reset: bool = True,
) -> Twin | None:
    """Simulate the fitted device with and without injection.

    Parameters
    ----------
    layout, basis
        Code and basis of the memory.
    rounds
        Numbers of rounds to simulate, those that the fit of eps uses.
    injection, seepage
        (data + measure,) fitted rates per round.
    observed
        What the ordinary errors are set to.
    shots
        Per number of rounds.
    rng
        Randomness.
    reset
        Whether measure qubits are reset each round.

    Returns
    -------
    twin
        None where the logical error of the twin is not determined.
    """
    fits, variances, mean = [], [], 0.0
    axis = np.array(rounds, dtype=float)
    for depolarise in CONSEQUENCES:
        noise = device(layout, injection, seepage, depolarise=depolarise)
        noise, mean = match_detection(noise, layout, basis, observed, rng, reset=reset)
        seed = int(rng.integers(2**63))
        pair = []
        for one in (noise, noise.without_injection()):
            # The same seed gives both the same ordinary errors: their difference is leakage's.
            stream = np.random.default_rng(seed)
            p = np.array(
                [_logical_error(layout, basis, r, shots, one, stream, reset) for r in rounds]
            )
            guess = (p * shots + 1) / (shots + 2)
            fit = fit_per_round(axis, 1 - 2 * p, 4 * guess * (1 - guess) / shots)
            if fit is None:
                return None
            pair.append(fit)
        fits.append([fit.error_per_round for fit in pair])
        relative = [fit.error / fit.error_per_round for fit in pair]
        ratio = pair[1].error_per_round / pair[0].error_per_round
        # An upper bound: common errors cancel in the ratio.
        variances.append(ratio**2 * sum(value**2 for value in relative))
    per_round = np.array(fits)
    shares = 1 - per_round[:, 1] / per_round[:, 0]
    return Twin(
        share=float(shares.mean()),
        statistical=float(np.sqrt(np.mean(variances) / len(CONSEQUENCES))),
        spread=float(abs(shares[1] - shares[0]) / 2),
        per_round=per_round,
        detection=(mean, float(observed.detection.mean())),
    )


def _events(shots: MemoryShots, layout: Layout, basis: Basis, reset: bool) -> NDArray[np.uint8]:
    return detection_events(
        bits_of(shots.states),
        bits_of(shots.final_states),
        shots.prepared,
        layout,
        basis,
        reset=reset,
    )


def _logical_error(
    layout: Layout,
    basis: Basis,
    rounds: int,
    shots: int,
    noise: MemoryNoise,
    rng: np.random.Generator,
    reset: bool,
) -> float:
    """Return the logical error after R rounds, in blocks of bounded memory."""
    decoder: MatchingDecoder = matching_decoder(layout, basis, rounds)
    failed, done = 0, 0
    while done < shots:
        block = min(BLOCK_SHOTS, shots - done)
        one = simulate(layout, basis, rounds, block, noise, rng, reset=reset)
        flipped = logical_parity(bits_of(one.final_states), layout, basis)
        flipped = flipped ^ logical_parity(one.prepared, layout, basis)
        failed += int((decoder.decode(_events(one, layout, basis, reset)) ^ flipped).sum())
        done += block
    return failed / shots
