"""What the rates stage reports of the shape of the rise."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr

from leakpipe.estimates import read
from leakpipe.rates.curves import Curves
from leakpipe.rates.shapes import shape_report


def curves_of(curve: np.ndarray, rounds: np.ndarray, silent: bool = False) -> Curves:
    """Four equal checks, 50 batches of 2000 shots; `silent` empties the trials of one check."""
    rng = np.random.default_rng(1)
    events = rng.binomial(2000, np.tile(curve[:, None], (50, 1, 4))).astype(float)
    trials = np.full(events.shape, 2000.0)
    if silent:
        events[:, 1, 2] = trials[:, 1, 2] = 0
    return Curves(rounds, rounds.astype(np.int64) - 1, events, trials)


ROUNDS = np.arange(2, 26.0)
LEAKAGE = 0.15 - 0.02 * np.exp(-ROUNDS / 5)


@pytest.mark.parametrize("silent", [False, True])
def test_leakage_is_one_exponential_that_goes_on(silent: bool) -> None:
    """Leakage gives its shape and a shared settling time; a check without readings is left out."""
    variables, findings = shape_report(curves_of(LEAKAGE, ROUNDS, silent))
    out = xr.Dataset(variables)
    assert out["rise_shape"].item() == "one exponential"
    assert out["rise_course"].item() == "goes on"
    shared = read(out, "shared_settling_rounds")
    assert shared.low is not None
    assert shared.high is not None
    assert shared.low < 5 < shared.high
    assert f"{3 if silent else 4} checks" in shared.basis
    assert out["scan_first"].values.tolist() == [2.0, 4.0, 7.0]
    assert findings == []


def test_transient_becomes_a_finding() -> None:
    """A rise of the first two layers only is reported as ambiguous."""
    curve = np.full(24, 0.15)
    curve[:2] -= (0.02, 0.006)
    variables, findings = shape_report(curves_of(curve, ROUNDS))
    assert xr.Dataset(variables)["rise_course"].item() == "over early"
    assert [finding.code for finding in findings] == ["rise-over-early"]


def test_two_settling_times_become_a_finding() -> None:
    """A fast and a slow part of one rise are both named."""
    curve = 0.25 - 0.1 * np.exp(-ROUNDS / 1.5) - 0.05 * np.exp(-ROUNDS / 12)
    findings = shape_report(curves_of(curve, ROUNDS))[1]
    assert "rise-two-times" in {finding.code for finding in findings}


@pytest.mark.parametrize("count", [0, 1, 3])
def test_few_rounds_are_no_data(count: int, tmp_path: object) -> None:
    """Too few rounds give unknown estimates that can be written, never a failure."""
    variables, findings = shape_report(curves_of(LEAKAGE[:count], ROUNDS[:count]))
    out = xr.Dataset(variables)
    out.to_netcdf(f"{tmp_path}/shape.nc", engine="netcdf4")
    assert out["rise_shape"].item() == out["shared_status"].item() == "no data"
    assert read(out, "shared_settling_rounds").value is None
    assert findings == []
