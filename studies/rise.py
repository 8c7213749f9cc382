"""Study of the rise: coverage of its intervals, status words, shapes, on a phenomenological memory.

Measured against the figures of the prototype study of the rates and of the acceptance list. The
memory (`phenomenological`) shares no code with the estimators. Where a figure is a proportion, its
own sampling error over independent runs is printed beside it.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from leakpipe.rates.choice import choose_shape, scan_starts
from leakpipe.rates.rise import RiseFit, fit_rise
from leakpipe.rates.shared_rise import SharedRise, fit_shared_rise
from studies.phenomenological import Truth, expected_detection, reduced, usual, without_leakage

FloatArray = NDArray[np.float64]

SEED = 41
TAU = 5.0
T49 = 2.0096
"""97.5 % quantile of Student's t with 49 degrees of freedom."""
NORMAL = 1.96
COVERED = (0.92, 0.97)
"""Acceptance range of the coverage of 95 % intervals."""


@dataclass(frozen=True)
class Curves:
    """Curves of one run: probability, variance (check, n), deviations (batch, check, n)."""

    rounds: FloatArray
    probability: FloatArray
    variance: FloatArray
    deviations: FloatArray

    def check(self, index: int) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        return (
            self.rounds,
            self.probability[index],
            self.variance[index],
            self.deviations[:, index],
        )

    @property
    def mean(self) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        count = len(self.probability)
        return (
            self.rounds,
            self.probability.mean(axis=0),
            self.variance.sum(axis=0) / count**2,
            self.deviations.mean(axis=1),
        )


def runs(truth: Truth, shots: int, count: int, seed: int) -> Iterator[Curves]:
    """Simulate recordings and hand out their interior curves."""
    for rng in np.random.default_rng(seed).spawn(count):
        _, sums = reduced(truth, shots, rng)
        inner = slice(1, truth.rounds)
        events = sums.events[:, inner].transpose(0, 2, 1).astype(float)
        trials = sums.trials[:, inner].transpose(0, 2, 1).astype(float)
        total = trials.sum(axis=0)
        probability = events.sum(axis=0) / total
        variance = probability * (1 - probability) / total
        deviations = (events - trials * probability) / total
        yield Curves(np.arange(2.0, truth.rounds + 1), probability, variance, deviations)


def true_amplitudes(truth: Truth) -> FloatArray:
    """Return B of each check: the exact curve projected on the exponential of the true memory."""
    expected = expected_detection(truth)
    rounds = np.arange(2.0, truth.rounds + 1)
    basis = np.column_stack([np.ones_like(rounds), -np.exp(-rounds / TAU)])
    return np.asarray(np.linalg.lstsq(basis, expected, rcond=None)[0][1])


class Table:
    """Prints measured against required and counts misses."""

    def __init__(self) -> None:
        self.misses = 0

    def row(self, name: str, value: float, low: float, high: float, error: float = 0.0) -> None:
        good = low <= value <= high
        self.misses += not good
        mark = "ok" if good else "MISSED"
        print(
            f"{name:<62} {value:7.3f} +- {error:.3f}  [{low:.3f}, {high:.3f}]  {mark}", flush=True
        )

    def share(self, name: str, hits: object, low: float, high: float, clusters: int) -> None:
        """Add a proportion; `hits` is (clusters, ...) and clusters are independent."""
        table = np.asarray(hits, dtype=float).reshape(clusters, -1)
        error = float(table.mean(axis=1).std(ddof=1) / np.sqrt(clusters))
        self.row(name, float(table.mean()), low, high, error)


def coverage(table: Table, shots: int, count: int, seed: int, drift: float = 0.0) -> None:
    """Coverage for single checks at distance 3."""
    truth = replace(usual(3), drift=drift)
    wanted = true_amplitudes(truth)
    profile, sandwich, binomial, amplitude, relative, fits = [], [], [], [], [], []
    starts = expected_detection(truth)[-1] + wanted * (np.exp(-truth.rounds / TAU) - 1)
    for curves in runs(truth, shots, count, seed):
        row: list[RiseFit] = [fit_rise(*curves.check(c)) for c in range(len(wanted))]
        fits.append([fit.status for fit in row])
        off = [abs(np.log(fit.tau / TAU)) / fit.log_tau_error for fit in row]
        profile.append([fit.tau_low < TAU < fit.tau_high for fit in row])
        sandwich.append([one < T49 for one in off])
        binomial.append(
            [one * np.sqrt(f.variance_ratio) < NORMAL for one, f in zip(off, row, strict=True)]
        )
        ends = [(f.amplitude_low, b, f.amplitude_high) for f, b in zip(row, wanted, strict=True)]
        amplitude.append([low < b < high for low, b, high in ends])
        ratios = wanted / starts
        relative.append(
            [f.relative_low < x < f.relative_high for f, x in zip(row, ratios, strict=True)]
        )
    name = f"one check, {shots // 1000}k" + (f", drift {drift:.0%}" if drift else "")
    table.share(f"{name}: ln tau, scaled profile", profile, *COVERED, count)
    table.share(f"{name}: ln tau, sandwich", sandwich, *COVERED, count)
    table.share(f"{name}: amplitude, scaled profile", amplitude, *COVERED, count)
    table.share(f"{name}: relative rise, scaled profile", relative, COVERED[0], 0.98, count)
    table.share(f"{name}: ln tau, binomial (for comparison)", binomial, 0, 1, count)
    if shots == 20_000 and not drift:
        settled = [[word == "settled" for word in row] for row in fits]
        found = [[word not in ("no rise", "falling") for word in row] for row in fits]
        table.share(f"{name}: rise found", found, 0.85, 1, count)
        table.share(f"{name}: called settled", settled, 0.45, 1, count)


def shared_coverage(table: Table, distance: int, count: int, seed: int) -> None:
    """Coverage of one tau for all checks; binomial errors must fail (negative control)."""
    truth = usual(distance)
    wanted = true_amplitudes(truth)
    fits: list[SharedRise] = []
    for curves in runs(truth, 20_000, count, seed):
        fit = fit_shared_rise(curves.rounds, curves.probability, curves.variance, curves.deviations)
        assert fit is not None
        fits.append(fit)
    off = np.array([abs(np.log(fit.tau / TAU)) / fit.log_tau_error for fit in fits])
    ratio = np.array([fit.variance_ratio for fit in fits])
    name = f"shared tau, d = {distance}, 20k"
    inside = [fit.tau_low < TAU < fit.tau_high for fit in fits]
    table.share(f"{name}: scaled profile", inside, *COVERED, count)
    table.share(f"{name}: sandwich", off < T49, *COVERED, count)
    pulls = np.array([np.abs(f.amplitude - wanted) / f.amplitude_error for f in fits])
    table.share(f"{name}: amplitudes, sandwich", pulls < T49, *COVERED, count)
    binomial = off * np.sqrt(ratio) < NORMAL
    table.share(f"{name}: binomial must fail (below .92)", binomial, 0, COVERED[0] - 1e-9, count)
    table.row(f"{name}: true over binomial error", float(np.sqrt(np.median(ratio))), 1.15, 1.5)


def words(truth: Truth, shots: int, count: int, seed: int, *, mean: bool) -> list[list[RiseFit]]:
    """Return fits per run: of the mean of the checks, or of each."""
    out = []
    for curves in runs(truth, shots, count, seed):
        checks = range(len(curves.probability))
        out.append(
            [fit_rise(*curves.mean)] if mean else [fit_rise(*curves.check(c)) for c in checks]
        )
    return out


def look_alikes(table: Table, seed: int) -> None:
    """Flat, linear and transient curves, and leakage, against the words they get."""
    base = usual(3)
    flat = words(without_leakage(base), 20_000, 250, seed, mean=False)
    found = [[fit.status not in ("no rise", "falling") for fit in row] for row in flat]
    settled = [[fit.status == "settled" for fit in row] for row in flat]
    table.share("flat: called a rise", found, 0, 0.012, 250)
    table.share("flat: called settled (never)", settled, 0, 0.002, 250)
    line = 1 + 0.12 * np.arange(1.0, 26) / 25 * 1.15
    # +15 % of the error probabilities raises d by 12 %: d is concave in them.
    wrong = []
    for curves in runs(without_leakage(base, line), 20_000, 250, seed + 1):
        shapes = [choose_shape(*curves.check(c)).shape for c in range(len(curves.probability))]
        wrong.append([shape not in ("flat", "line") for shape in shapes])
    table.share("linear +12 %: called exponential", wrong, 0, 0.08, 250)
    transient = np.ones(25)
    transient[:2] = (0.85, 0.9)
    courses: dict[str, Counter[str]] = {}
    for name, truth in (
        ("leakage", base),
        ("transient", without_leakage(base, transient)),
    ):
        courses[name] = Counter(
            scan_starts(*curves.mean).course for curves in runs(truth, 20_000, 150, seed + 2)
        )
    share = courses["leakage"]["goes on"] / 150
    table.row("mean of 8 checks, leakage: rise goes on", share, 0.95, 1)
    share = courses["transient"]["over early"] / 150
    table.row("mean of 8 checks, transient of 2 rounds: over early", share, 0.9, 1)


def settling(table: Table, seed: int) -> None:
    """Which settling times are called settled, at 20k shots, mean of eight checks.

    The prototype study found 1.00 for 2 to 10 rounds and .06 for 40. Ours also refuses a tau above
    half the longest run: at 10 rounds and a scatter of ln tau of .25, a fifth lies there.
    At 2 rounds the scatter is .39, and an interval that reaches below half a round is a tenth.
    """
    for tau, low, high in ((2.0, 0.8, 1.0), (5.0, 0.97, 1.0), (10.0, 0.7, 1.0), (40.0, 0.0, 0.1)):
        fits = words(usual(3, tau=tau), 20_000, 80, seed, mean=True)
        settled = [[fit.status == "settled" for fit in row] for row in fits]
        table.share(f"mean of 8 checks, tau {tau:g}: called settled", settled, low, high, 80)


def main() -> int:
    """Print the table; return the number of figures missed."""
    table = Table()
    coverage(table, 20_000, 300, SEED)
    coverage(table, 50_000, 200, SEED + 1)
    coverage(table, 20_000, 150, SEED + 2, drift=0.2)
    shared_coverage(table, 3, 500, SEED + 3)
    shared_coverage(table, 5, 700, SEED + 4)
    look_alikes(table, SEED + 5)
    settling(table, SEED + 9)
    return table.misses
