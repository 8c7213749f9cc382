"""Speed of classification, as ratios within one run.

Points: the compiled kernel (states, posteriors and their sums) against chunked prediction of
scikit-learn's mixture, and against a plain copy of the same points. Traces: the fused integration
of int16 samples against reading them once (their sum).
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable

import numpy as np
from sklearn.mixture import GaussianMixture

from leakpipe.readout.kernel import classify, kernel_arrays, label_shift, packed_rule
from leakpipe.readout.population import WORKING_PRIOR, discriminant
from leakpipe.readout.weights import integrate

SHOTS, COLUMNS = 40_000, 48
TRACES, SAMPLES = 20_000, 100
REPEATS = 5
NEEDED = {"mixture prediction": 15.0, "memory copy": 0.12, "reading traces": 0.35}
"""Acceptance figures of the prototype study."""


def best(task: Callable[[], object]) -> float:
    """Return the shortest of several runs, after one to warm up."""
    task()
    times = []
    for _ in range(REPEATS):
        start = time.perf_counter()
        task()
        times.append(time.perf_counter() - start)
    return min(times)


def main() -> int:
    """Print the ratios; return 0 if all reach the study's figures."""
    rng = np.random.default_rng(1)
    means = np.array([[0.0, 0.0], [4.8, 0.0], [6.0, 4.6]])
    points = means[rng.choice(3, (SHOTS, COLUMNS), p=(0.5, 0.49, 0.01))]
    points = (points + rng.standard_normal(points.shape)).astype(np.float32)
    rule = packed_rule(discriminant(means, np.eye(2), 400.0), 0.005, WORKING_PRIOR[2])
    rules = np.tile(rule, (COLUMNS, 1))
    priors = np.full(COLUMNS, 0.005, dtype=np.float32)
    batch = np.arange(SHOTS) * 50 // SHOTS
    shift = np.array(label_shift(WORKING_PRIOR), dtype=np.float32)
    out = kernel_arrays(SHOTS, COLUMNS, 50)
    ours = best(lambda: classify(points, rules, priors, batch, shift, *out))
    copy = best(points.copy)
    model = GaussianMixture(3, covariance_type="tied", means_init=means, max_iter=5)
    model.fit(points[:200].reshape(-1, 2))
    few = points[:2000].reshape(-1, 2)
    theirs = best(lambda: [model.predict(part) for part in np.array_split(few, 4)])
    theirs *= SHOTS / 2000
    traces = rng.integers(-2000, 2000, (TRACES, 4, SAMPLES, 2), dtype=np.int16)
    weights = rng.standard_normal((4, SAMPLES, 2, 2)).astype(np.float32)
    fused = best(lambda: integrate(traces, weights))
    # Reading the samples once: the fastest pass over int16 that touches every value.
    read = best(lambda: traces.reshape(-1).view(np.int64).max())
    found = {
        "mixture prediction": theirs / ours,
        "memory copy": copy / ours,
        "reading traces": read / fused,
    }
    rate = SHOTS * COLUMNS / ours / 1e6
    print(f"kernel {rate:.0f} M points/s, traces {traces.nbytes / fused / 1e9:.2f} GB/s")
    for name, ratio in found.items():
        verdict = "ok" if ratio >= NEEDED[name] else "FAILED"
        print(f"speed against {name}: {ratio:.3f} (required {NEEDED[name]}) {verdict}")
    return 0 if all(found[name] >= NEEDED[name] for name in NEEDED) else 1


if __name__ == "__main__":
    sys.exit(main())
