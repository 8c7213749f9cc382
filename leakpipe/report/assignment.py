"""How well 0 and 1 are read: one number per qubit with its interval, from the readout model."""

from __future__ import annotations

import numpy as np
from scipy.stats import norm

from leakpipe.estimates import LEVEL, Estimate
from leakpipe.report.inputs import PatchReport

BASIS = "calibration shots as prepared ({} of 0, {} of 1); preparation errors included"


def wilson(hits: float, trials: float) -> tuple[float, float]:
    """Return the Wilson interval of a proportion (Newcombe, Stat. Med. 17, 857 (1998))."""
    z = float(norm.ppf(0.5 + LEVEL / 2))
    share = hits / trials
    middle = (share + z**2 / (2 * trials)) / (1 + z**2 / trials)
    width = z * np.sqrt(share * (1 - share) / trials + z**2 / (4 * trials**2)) / (1 + z**2 / trials)
    return float(max(middle - width, 0.0)), float(min(middle + width, 1.0))


def mean_of_two(
    first: tuple[float, float], second: tuple[float, float]
) -> tuple[float, float, float]:
    """Return the mean of two proportions with its interval, by square-and-add.

    The distances from each proportion to the ends of its Wilson interval add in quadrature
    (Newcombe, Stat. Med. 17, 873 (1998), method 10, there for differences; recalled from memory).

    Parameters
    ----------
    first, second
        (hits, trials) of each.
    """
    shares, ends = [], []
    for hits, trials in (first, second):
        shares.append(hits / trials)
        ends.append(wilson(hits, trials))
    value = sum(shares) / 2
    down = np.hypot(shares[0] - ends[0][0], shares[1] - ends[1][0]) / 2
    up = np.hypot(ends[0][1] - shares[0], ends[1][1] - shares[1]) / 2
    return value, float(value - down), float(value + up)


def assignment(patch: PatchReport, qubit: str) -> Estimate:
    """Return the mean probability of a right reading over preparations 0 and 1.

    The readout model's table of labels per preparation; preparation errors count as wrong readings.
    """
    table = patch.array("model", "assignment_as_prepared", ("qubit", "prepared", "label"))
    shots = patch.array("model", "shots", ("qubit", "prepared"))
    names = [str(name) for name in patch.labels("model", "qubit")]
    if table is None or shots is None:
        return Estimate.unknown("no readout model with calibration counts")
    if qubit not in names:
        return Estimate.unknown("not in any calibration")
    row = names.index(qubit)
    right, trials = np.diagonal(table[row])[:2], shots[row, :2]
    if not (np.isfinite(right).all() and np.isfinite(trials).all() and (trials > 0).all()):
        return Estimate.unknown("no finite calibration shots of 0 and of 1")
    pairs = [(float(r * n), float(n)) for r, n in zip(right, trials, strict=True)]
    value, low, high = mean_of_two(*pairs)
    basis = BASIS.format(*(int(n) for n in trials))
    return Estimate(value, low, high, LEVEL, True, basis)
