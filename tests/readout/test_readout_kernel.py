"""The compiled classification against its numpy twin, and outside references of the mixture."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from sklearn.datasets import load_iris
from sklearn.discriminant_analysis import LinearDiscriminantAnalysis
from sklearn.mixture import GaussianMixture

from leakpipe.readout.kernel import (
    classify,
    classify_numpy,
    kernel_arrays,
    label_shift,
    packed_rule,
)
from leakpipe.readout.mixture import fit, start
from leakpipe.readout.population import WORKING_PRIOR, discriminant, posteriors

BATCHES = 50


@settings(deadline=None, max_examples=40)
@given(
    seed=st.integers(0, 2**32 - 1),
    shots=st.integers(1, 80),
    columns=st.integers(1, 5),
    missing=st.floats(0, 0.5),
)
def test_kernel_equals_its_twin(seed: int, shots: int, columns: int, missing: float) -> None:
    """States, posteriors and sums agree, missing readings included.

    The kernel works in float32: posteriors agree to 1e-4 (log-odds of up to some hundred carry
    rounding of 1e-5), and labels may differ only where two classes tie to that precision.
    """
    rng = np.random.default_rng(seed)
    rules, spots = [], []
    for _ in range(columns):
        means = rng.normal(0, 1, (3, 2)) + np.array([[0, 0], [4, 0], [6, 3]])
        covariance = np.diag(rng.uniform(0.5, 1.5, 2))
        rules.append(discriminant(means, covariance, 400.0))
        spots.append(means[rng.integers(0, 3, shots)] + rng.normal(0, 1, (shots, 2)))
    points = np.stack(spots, axis=1).astype(np.float32)
    points[rng.random((shots, columns)) < missing] = np.nan
    priors = rng.uniform(1e-4, 0.2, columns)
    batch = np.sort(rng.integers(0, BATCHES, shots))
    packed = np.stack(
        [packed_rule(r, p, WORKING_PRIOR[2]) for r, p in zip(rules, priors, strict=True)]
    )
    states, leak, sums, squares = kernel_arrays(shots, columns, BATCHES)
    shift = np.array(label_shift(WORKING_PRIOR), dtype=np.float32)
    classify(points, packed, priors.astype(np.float32), batch, shift, states, leak, sums, squares)
    twin = classify_numpy(points, rules, priors, batch, WORKING_PRIOR, BATCHES)
    np.testing.assert_allclose(leak, twin[1], atol=2e-4)
    np.testing.assert_allclose(sums, twin[2], atol=1e-4 * shots)
    np.testing.assert_allclose(squares, twin[3], atol=2e-4 * shots)
    assert np.mean(states != twin[0]) <= 1 / (shots * columns)
    np.testing.assert_array_equal(states == 255, np.isnan(points).any(axis=2))


def test_mixture_agrees_with_a_general_one_where_it_can() -> None:
    """One preparation with free weights and no tails is an ordinary tied mixture: scikit-learn's
    GaussianMixture from the same start reaches the same means and likelihood."""
    rng = np.random.default_rng(1)
    means = np.array([[0.0, 0.0], [4.0, 0.5], [6.0, 4.0]])
    x = means[rng.choice(3, 6000, p=(0.5, 0.3, 0.2))] + rng.normal(0, 1, (6000, 2))
    parts = [x[:2000], x[2000:4000], x[4000:]]
    begin = start([means[s] + rng.normal(0, 1, (500, 2)) for s in range(3)], [0, 1, 2])
    ours = fit(parts, begin, decay=False)
    theirs = GaussianMixture(3, covariance_type="tied", means_init=means, tol=1e-10, max_iter=500)
    theirs.fit(x)
    # Three parts with weights of their own are one more freedom than one common set: their
    # weights differ by binomial noise of .01, which moves the means by far less than .02.
    np.testing.assert_allclose(ours.means, theirs.means_, atol=0.02)
    np.testing.assert_allclose(ours.covariance, theirs.covariances_, atol=0.02)
    assert ours.converged


def test_posteriors_classify_iris_like_a_linear_discriminant() -> None:
    """With sample means, pooled covariance and even priors our rule labels Fisher's iris exactly
    as the linear discriminant of scikit-learn does, with its 3 of 150 wrong.

    (Tied covariance gives 3 of 150 on the training set as well; SAS/STAT, PROC DISCRIM, reports 3
    for the quadratic rule.)
    """
    x, y = load_iris(return_X_y=True)
    means = np.array([x[y == k].mean(axis=0) for k in range(3)])
    scatter = sum((x[y == k] - means[k]).T @ (x[y == k] - means[k]) for k in range(3))
    rule = discriminant(
        means, np.asarray(scatter) / (len(x) - 3), 1e9, (1 / 3, 1 / 3, 1 / 3, 1e-12)
    )
    ours = posteriors(x, rule)[:, :3].argmax(axis=1)
    theirs = LinearDiscriminantAnalysis(priors=[1 / 3] * 3).fit(x, y).predict(x)
    np.testing.assert_array_equal(ours, theirs)
    assert np.sum(ours != y) == 3
