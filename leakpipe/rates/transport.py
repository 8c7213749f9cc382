"""Does leakage move between neighbours? Leaked closing readings after a leaked reading."""

from __future__ import annotations

import numpy as np
import xarray as xr

from leakpipe.codes.layout import Layout
from leakpipe.estimates import Estimate

FIRST_LAG, LAST_LAG = 1, 8


def transport_excess(
    detection: xr.Dataset, readout: xr.Dataset, layout: Layout
) -> tuple[Estimate, float]:
    """Compare neighbours of a leaked measure qubit with what independence predicts.

    Parameters
    ----------
    detection
        With `after_leaked`, `leaked_before` and `closing_leaked_labels`.
    readout
        Tells which qubits' leaked readings can be used.
    layout
        Neighbours.

    Returns
    -------
    excess, z
        Extra leaked neighbours per leaked label 1 to 8 rounds before the end, and its significance
        against the Poisson spread of the joint counts.
    """
    plain = detection["injected"].values == 0
    usable = dict(zip(readout["qubit"].values, readout["usable"].values.astype(bool), strict=True))
    pairs = layout.adjacency & np.array(
        [[usable[m] and usable[d] for d in layout.data] for m in layout.measure]
    )
    joint, expected, before = 0.0, 0.0, 0.0
    for row in np.flatnonzero(plain):
        shots = float(detection["shots"].values[row])
        closing = detection["closing_leaked_labels"].values[row].sum(axis=0) / shots
        after = detection["after_leaked"].values[row, FIRST_LAG : LAST_LAG + 1].astype(float)
        earlier = detection["leaked_before"].values[row, FIRST_LAG : LAST_LAG + 1].astype(float)
        joint += float((after * pairs).sum())
        expected += float((earlier[:, :, None] * closing * pairs).sum())
        before += float(earlier.sum())
    if expected <= 0 or before <= 0:
        return Estimate.unknown("no leaked readings to follow"), 0.0
    z = (joint - expected) / np.sqrt(expected)
    excess = (joint - expected) / before
    error = np.sqrt(max(joint, expected)) / before
    basis = "leaked closing readings of the neighbours 1 to 8 rounds after a leaked reading"
    return Estimate.from_error(excess, error, basis), float(z)
