"""Speed of bootstrap refits of rises against a general fitter, in the same run.

24 checks x 1000 refits at once against single fits of the same curves by lmfit and by
scipy.optimize.curve_fit, started at the truth (a start they would not have).
"""

from __future__ import annotations

import time

import lmfit
import numpy as np
from scipy.optimize import curve_fit

from leakpipe.rates.shared_rise import refit_rises

CHECKS, DRAWS, BATCHES = 24, 1000, 50
SAMPLE = 60
"""General fits timed; their mean time is scaled to all."""
REQUIRED_SHARE = 0.03
"""Of the general fitter's time (acceptance figure)."""
AGREE = 1e-4
"""Both reach the same minimum: their step tolerance of 1e-8 of the sum is 1e-4 of a parameter."""


def curve(rounds: np.ndarray, level: float, amplitude: float, log_tau: float) -> np.ndarray:
    """Return A - B exp(-r / tau)."""
    return level - amplitude * np.exp(-rounds * np.exp(-log_tau))


def main() -> int:
    """Print the times and their ratio; return 0 if it holds."""
    rng = np.random.default_rng(3)
    rounds = np.arange(2, 26.0)
    truth = (0.15, 0.018, np.log(5.0))
    expected = np.tile(curve(rounds, *truth), (CHECKS, 1))
    events = rng.binomial(2000, expected, (BATCHES, CHECKS, len(rounds))).astype(float)
    trials = np.full(events.shape, 2000.0)
    picks = rng.integers(0, BATCHES, (DRAWS, BATCHES))
    refit_rises(rounds, events, trials, picks[:2])
    start = time.perf_counter()
    draws = refit_rises(rounds, events, trials, picks)
    ours = time.perf_counter() - start
    whole = events.sum(axis=0) / trials.sum(axis=0)
    sigma = np.sqrt(whole * (1 - whole) / trials.sum(axis=0))
    model = lmfit.Model(curve, independent_vars=["rounds"])
    times: dict[str, list[float]] = {"lmfit": [], "scipy": []}
    worst = 0.0
    for draw in range(SAMPLE):
        check = draw % CHECKS
        picked = picks[draw]
        values = events[picked, check].sum(axis=0) / trials[picked, check].sum(axis=0)
        start = time.perf_counter()
        names = ("level", "amplitude", "log_tau")
        fit = model.fit(
            values,
            model.make_params(**dict(zip(names, truth, strict=True))),
            rounds=rounds,
            weights=1 / sigma[check],
            scale_covar=False,
        )
        times["lmfit"].append(time.perf_counter() - start)
        start = time.perf_counter()
        curve_fit(curve, rounds, values, truth, sigma[check], absolute_sigma=True)
        times["scipy"].append(time.perf_counter() - start)
        worst = max(worst, abs(fit.best_values["log_tau"] - draws.log_tau[draw, check]))
    total = CHECKS * DRAWS
    print(f"ours: {ours:.2f} s, {ours / total * 1e6:.0f} us a fit; ln tau agrees to {worst:.1e}")
    failed = worst > AGREE
    for name, each in times.items():
        share = ours / (np.median(each) * total)
        print(f"{name}: {np.median(each) * 1e3:.2f} ms a fit; ours takes {share:.2%} of it")
        failed |= share > REQUIRED_SHARE
    return int(failed)
