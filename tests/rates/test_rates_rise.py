"""The rise of the detection probability: fits, intervals, status words."""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as statsmodels
from scipy.stats import binom

from leakpipe.rates.critical import critical_values
from leakpipe.rates.reported import relative_rise
from leakpipe.rates.rise import FREEDOM, NO_DATA, amplitude_limit, fit_rise, status_of
from leakpipe.rates.shared_rise import fit_shared_rise, refit_rises

ROUNDS = np.arange(2, 26.0)
BATCHES = 50


def counted(
    curve: np.ndarray, shots: int, rng: np.random.Generator, common: float = 0.0
) -> tuple[np.ndarray, np.ndarray]:
    """Draw events (batch, ..., n) of independent rounds, times a factor common to a batch."""
    per_batch = shots // BATCHES
    factor = 1 + common * rng.standard_normal((BATCHES,) + (1,) * curve.ndim)
    events = rng.binomial(per_batch, np.clip(curve * factor, 0, 1), (BATCHES, *curve.shape))
    return events.astype(float), np.full(events.shape, float(per_batch))


def inputs(
    events: np.ndarray, trials: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    total = trials.sum(axis=0)
    probability = events.sum(axis=0) / total
    variance = probability * (1 - probability) / total
    return ROUNDS, probability, variance, (events - trials * probability) / total


def rise(level: float = 0.15, amplitude: float = 0.018, tau: float = 5.0) -> np.ndarray:
    return level - amplitude * np.exp(-ROUNDS / tau)


def test_exact_curve_is_found() -> None:
    """A curve without noise gives back its parameters.

    The search stops at steps of ln tau below 1e-9 and the rounding of the data (1e-16 of .15)
    moves ln tau by 1e-16 / .018 times a condition below 1e4: 1e-8 bounds both.
    """
    curve = rise(tau=4.3)
    fit = fit_rise(ROUNDS, curve, np.full(24, 1e-6), np.zeros((50, 24)))
    assert np.log(fit.tau) == pytest.approx(np.log(4.3), abs=1e-8)
    assert fit.level == pytest.approx(0.15, rel=1e-8)
    assert fit.amplitude == pytest.approx(0.018, rel=1e-7)
    assert fit.relative == pytest.approx(0.018 / 0.132, rel=1e-7)
    np.testing.assert_allclose(fit.curve(ROUNDS), curve, rtol=1e-10)


def test_covariance_equals_weighted_least_squares() -> None:
    """Binomial and sandwich covariance equal those of an outside regression package.

    Gauss-Newton linearisation at the same point: only rounding differs.
    """
    from leakpipe.rates.rise import jacobian_of
    from leakpipe.rates.sandwich import Sandwich

    rng = np.random.default_rng(1)
    events, trials = counted(rise(), 50_000, rng)
    rounds, probability, variance, deviations = inputs(events, trials)
    fit = fit_rise(rounds, probability, variance, deviations)
    jacobian = jacobian_of(rounds, fit.amplitude, np.log(fit.tau))
    binomial, sandwich = Sandwich(1 / variance, deviations).covariance(jacobian)
    model = statsmodels.WLS(probability, jacobian, weights=1 / variance).fit(cov_type="fixed scale")
    np.testing.assert_allclose(binomial, model.cov_params(), rtol=1e-7)
    # The sandwich is that of a weighted regression on the batches' own probabilities.
    stacked = np.tile(jacobian, (BATCHES, 1))
    own = (probability + deviations * BATCHES).ravel()
    clusters = statsmodels.WLS(own, stacked, weights=np.tile(1 / variance, BATCHES) / BATCHES).fit(
        cov_type="cluster",
        cov_kwds={"groups": np.repeat(np.arange(BATCHES), 24), "use_correction": False},
    )
    # Theirs takes residuals from the fitted curve, ours from the mean: the scores differ by the
    # gradient of the fit, which is zero at the minimum for A, B and ln tau.
    expected = clusters.cov_params() * BATCHES / (BATCHES - 1)
    np.testing.assert_allclose(sandwich, expected, rtol=1e-6)
    np.testing.assert_allclose(fit.covariance, sandwich, rtol=1e-12)


def test_profile_ends_sit_on_the_threshold() -> None:
    """At the ends of the interval of tau the best fit is worse by exactly the scaled threshold."""
    from scipy.stats import t

    rng = np.random.default_rng(2)
    args = inputs(*counted(rise(), 60_000, rng))
    fit = fit_rise(*args)
    rounds, probability, variance, _ = args

    def best_sum(tau: float) -> float:
        basis = np.column_stack([np.ones(24), np.exp(-rounds / tau)]) / np.sqrt(variance)[:, None]
        target = probability / np.sqrt(variance)
        coefficients = np.linalg.lstsq(basis, target, rcond=None)[0]
        return float(np.sum((target - basis @ coefficients) ** 2))

    threshold = t.ppf(0.975, 49) ** 2 * fit.variance_ratio
    for end in (fit.tau_low, fit.tau_high):
        # brentq leaves 2e-12 of ln tau; the sum's slope there is of the threshold's size per unit.
        assert best_sum(end) - best_sum(fit.tau) == pytest.approx(threshold, rel=1e-6)


def test_amplitude_profile_by_brute_force() -> None:
    """The ends of the amplitude's interval agree with a search over tau at fixed amplitude.

    Brute force steps ln tau by .002; both curves are flat at the end, so 1e-3 of the interval's
    half width is ample for either grid.
    """
    rng = np.random.default_rng(4)
    rounds, probability, variance, deviations = inputs(*counted(rise(), 100_000, rng))
    fit = fit_rise(rounds, probability, variance, deviations)
    weight = 1 / variance
    decays = np.exp(-rounds / np.exp(np.arange(np.log(0.3), np.log(300), 0.002))[:, None])

    def lowest(amplitude: float) -> float:
        shifted = probability + amplitude * decays
        mean = (shifted @ weight) / weight.sum()
        return float((((shifted - mean[:, None]) ** 2) @ weight).min())

    from leakpipe.rates.profiles import Profile

    best = lowest(fit.amplitude)
    profile = Profile(
        rounds, probability, weight, np.linspace(-1.2, 5.7, 60), np.log(fit.tau), best
    )
    low, high = profile.amplitude_ends(4.0)
    half = (high - low) / 2
    for end, outside in ((low, -1e-3), (high, 1e-3)):
        assert lowest(end + outside * half) - best > 4.0 > lowest(end - outside * half) - best


def test_sandwich_sees_what_binomial_errors_miss() -> None:
    """Batches that fluctuate together widen the errors; independent shots leave them alone.

    The variance ratio from 50 batches scatters by sqrt(2 / 49) = .20; the mean of 40 fits by .032:
    4 standard errors around 1. The common factor of 3 % adds (.03 * .15)^2 to binomial batch
    variances of .15 * .85 / 400 in the direction of the level.
    """
    rng = np.random.default_rng(5)
    quiet, noisy = [], []
    for _ in range(40):
        fit = fit_rise(*inputs(*counted(rise(), 20_000, rng)))
        quiet.append(fit.covariance[0, 0])
        noisy.append(fit_rise(*inputs(*counted(rise(), 20_000, rng, common=0.1))).covariance[0, 0])
        quiet[-1] = fit.variance_ratio
    assert abs(np.mean(quiet) - 1) < 4 * 0.2 / np.sqrt(40)
    level_variance = 0.15 * 0.85 / 20_000 / 24
    assert np.median(noisy) > 4 * level_variance


def test_coverage_small() -> None:
    """Profile intervals of tau, amplitude and relative rise cover as they say.

    240 curves: 4.2 binomial standard deviations around .95 (.014 each), so one chance in 4e4.
    """
    rng = np.random.default_rng(6)
    count = 240
    hits = np.zeros(3)
    for _ in range(count):
        fit = fit_rise(*inputs(*counted(rise(), 50_000, rng)))
        hits += [
            fit.tau_low < 5 < fit.tau_high,
            fit.amplitude_low < 0.018 < fit.amplitude_high,
            fit.relative_low < 0.018 / 0.132 < fit.relative_high,
        ]
    low, high = binom.ppf([2e-5, 1 - 2e-5], count, 0.95)
    assert np.all((hits >= low) & (hits <= high)), hits / count


def test_flat_is_never_settled() -> None:
    """A flat curve has no rise (99 % of the time) and never a quoted settling time.

    400 curves at 1 %: at most 13 with a chance of 1e-4 to exceed.
    """
    rng = np.random.default_rng(7)
    words = [fit_rise(*inputs(*counted(np.full(24, 0.15), 20_000, rng))).status for _ in range(400)]
    found = sum(word != "no rise" for word in words)
    assert found <= binom.ppf(1 - 1e-4, 400, 0.01)
    assert words.count("settled") <= binom.ppf(1 - 1e-4, 400, 0.004)


@pytest.mark.parametrize(
    ("curve", "shots", "status"),
    [
        (rise(), 200_000, "settled"),
        (rise(amplitude=-0.02), 200_000, "falling"),
        (rise(amplitude=0.1, tau=60.0), 100_000, "long"),
        (0.13 + 0.0008 * ROUNDS, 100_000, "long"),
        (rise(amplitude=0.9, tau=0.4), 400_000, "short"),
        (np.full(24, 0.15), 50_000, "no rise"),
    ],
)
def test_status_words(curve: np.ndarray, shots: int, status: str) -> None:
    """Clear cases get their word in each of five draws."""
    for seed in range(5):
        fit = fit_rise(*inputs(*counted(curve, shots, np.random.default_rng(seed))))
        assert fit.status == status
        if status == "long":
            assert fit.slope - 3 * fit.slope_error > 0, "the initial slope is what is known"
        if status in ("long", "short"):
            is_open = fit.tau_high == np.inf or fit.tau_low < 0.5 or fit.tau > 12.5
            assert is_open or fit.ratio_line < critical_values(ROUNDS, FREEDOM).line[0]


def test_status_order() -> None:
    """A significant curve's word follows sign, lower end, upper end, in this order."""
    critical = critical_values(ROUNDS, FREEDOM)
    far = (100.0, 100.0)

    def word(tau: float, low: float, high: float, amplitude: float = 0.1) -> str:
        return status_of(tau, (low, high), amplitude, far, 25.0, critical)

    assert word(5, 3, 8) == "settled"
    assert word(5, 3, 8, -0.1) == "falling"
    assert word(0.9, 0.6, 1.5) == word(5, 0.4, 8) == word(5, 0.0, np.inf) == "short"
    assert word(5, 3, 76) == word(13, 9, 20) == word(5, 3, np.inf) == "long"
    assert status_of(5, (3, 8), 0.1, (5.0, 100.0), 25.0, critical) == "no rise"
    assert status_of(5, (3, 8), 0.1, (100.0, 1.0), 25.0, critical) == "long"


def test_upper_limit_of_a_rise_not_found() -> None:
    """The upper limit holds for a rise just too small to be found, at least 95 % of the time.

    200 curves; the limit is a maximum over settling times, so it may cover more: one-sided, 4
    binomial standard deviations below .95.
    """
    rng = np.random.default_rng(8)
    truth = 0.004
    covered = [
        amplitude_limit(fit_rise(*inputs(*counted(rise(amplitude=truth), 20_000, rng)))) > truth
        for _ in range(200)
    ]
    assert np.mean(covered) > 0.95 - 4 * np.sqrt(0.95 * 0.05 / 200)


@pytest.mark.parametrize("count", [0, 1, 3])
def test_too_few_rounds(count: int) -> None:
    """Fewer than four rounds are no data, not a fit."""
    few = np.arange(2, 2 + count, dtype=float)
    fit = fit_rise(few, np.full(count, 0.1), np.full(count, 1e-6), np.zeros((50, count)))
    assert fit.status == "no data"
    assert np.isnan(NO_DATA.tau)
    assert np.isnan(fit.covariance).all()


def test_four_rounds_still_fit() -> None:
    """Four rounds and no scatter between batches end in a statement, not in a failure."""
    rounds = np.arange(2, 6.0)
    fit = fit_rise(rounds, np.array([0.1, 0.11, 0.115, 0.117]), np.full(4, 1e-6), np.zeros((50, 4)))
    assert fit.status in ("settled", "short", "long")
    assert np.isfinite(fit.tau)


def test_shared_tau_of_equal_curves_is_theirs() -> None:
    """Copies of one curve share its tau; with joint deviations the error does not shrink.

    Copies fluctuate together, so sandwich errors must stay those of one curve (within the search's
    1e-7 of ln tau, times a condition below 1e3), while binomial ones fall by sqrt(4).
    """
    rng = np.random.default_rng(9)
    rounds, p, v, d = inputs(*counted(rise(), 100_000, rng))
    one = fit_rise(rounds, p, v, d)
    four = fit_shared_rise(
        rounds, np.tile(p, (4, 1)), np.tile(v, (4, 1)), np.tile(d[:, None], (1, 4, 1))
    )
    assert four is not None
    assert np.log(four.tau) == pytest.approx(np.log(one.tau), abs=1e-6)
    assert four.log_tau_error == pytest.approx(one.log_tau_error, rel=1e-4)
    assert four.amplitude_error == pytest.approx(np.full(4, one.amplitude_error), rel=1e-4)
    assert four.level_error == pytest.approx(np.full(4, np.sqrt(one.covariance[0, 0])), rel=1e-4)
    assert four.variance_ratio == pytest.approx(4 * one.variance_ratio, rel=1e-3)
    assert four.tau_high / four.tau_low == pytest.approx(one.tau_high / one.tau_low, rel=1e-3)


def test_shared_tau_is_sharper_than_each() -> None:
    """Independent checks with levels and amplitudes of their own give one sharper, right tau.

    Eight equal checks: the error of ln tau falls by sqrt(8) = 2.8; 2 leaves room for its scatter of
    a fifth. The pull of 60 fits has mean 0 and spread 1 within 4 standard errors.
    """
    rng = np.random.default_rng(10)
    curves = np.stack([rise(0.11 + 0.005 * c, 0.016 + 0.001 * c) for c in range(8)])
    pulls, gains = [], []
    for _ in range(60):
        args = inputs(*counted(curves, 20_000, rng))
        fit = fit_shared_rise(*args)
        assert fit is not None
        pulls.append(np.log(fit.tau / 5) / fit.log_tau_error)
        gains.append(fit_rise(args[0], args[1][0], args[2][0], args[3][:, 0]).log_tau_error)
        gains[-1] /= fit.log_tau_error
    assert abs(np.mean(pulls)) < 4 / np.sqrt(60)
    assert abs(np.std(pulls) - 1) < 4 / np.sqrt(2 * 60)
    assert np.median(gains) > 2


def test_bootstrap_spread_equals_sandwich() -> None:
    """Refits to samples of batches scatter as the sandwich says, for two checks at once.

    400 draws give a spread to 3.5 %; 50 batches are the same for both, and at 400k shots ln tau is
    linear in the data to a few percent: 15 % allowed.
    """
    rng = np.random.default_rng(11)
    curves = np.stack([rise(), rise(0.12, 0.02, 4.0)])
    events, trials = counted(curves, 400_000, rng)
    picks = rng.integers(0, BATCHES, (400, BATCHES))
    draws = refit_rises(ROUNDS, events.astype(float), trials, picks)
    rounds, p, v, d = inputs(events, trials)
    for check in range(2):
        fit = fit_rise(rounds, p[check], v[check], d[:, check])
        assert draws.log_tau[:, check].std() == pytest.approx(fit.log_tau_error, rel=0.15)
        assert draws.amplitude[:, check].std() == pytest.approx(fit.amplitude_error, rel=0.15)
        same = refit_rises(ROUNDS, events, trials, np.arange(BATCHES)[None])
        assert same.log_tau[0, check] == pytest.approx(np.log(fit.tau), abs=1e-8)


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("level", [0.0, 0.1])
def test_curve_without_any_scatter(level: float) -> None:
    """A silent or exactly constant check is no rise, without a warning or a division by zero."""
    args = (ROUNDS, np.full(24, level), np.full(24, 1e-6), np.zeros((50, 24)))
    fit = fit_rise(*args)
    assert fit.status == "no rise"
    assert fit.amplitude == 0
    assert 0 < amplitude_limit(fit) < 0.1
    estimate = relative_rise(fit, "it")
    assert not estimate.identifiable
    assert estimate.value is None
    assert (estimate.high is None) == (level == 0)
    events = np.full((50, 1, 24), level * 1000)
    draws = refit_rises(ROUNDS, events, np.full(events.shape, 1000.0), np.arange(50)[None])
    assert draws.amplitude == pytest.approx(0, abs=1e-15)


def test_relative_rise_says_what_is_known() -> None:
    """Settled gives a profile interval, long its slope in words, short an open upper end."""
    rng = np.random.default_rng(12)
    settled = fit_rise(*inputs(*counted(rise(), 200_000, rng)))
    estimate = relative_rise(settled, "it")
    assert estimate.identifiable
    assert (estimate.low, estimate.high) == (settled.relative_low, settled.relative_high)
    long = fit_rise(*inputs(*counted(rise(amplitude=0.1, tau=60.0), 100_000, rng)))
    words = relative_rise(long, "it")
    assert words.value is None
    assert f"{long.slope:.2g}" in words.basis
    short = fit_rise(*inputs(*counted(rise(amplitude=0.9, tau=0.4), 400_000, rng)))
    opened = relative_rise(short, "it")
    assert opened.value is None
    assert not opened.identifiable
    assert relative_rise(NO_DATA, "it").basis.startswith("too few")
