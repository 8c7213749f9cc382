"""Integration weights: from digitised traces to two-dimensional points.

Traces are block-averaged to about twenty time bins and projected on the two directions of a linear
discriminant with shrunk covariance (Ledoit and Wolf, J. Multivar. Anal. 88, 365 (2004)), which
needs a few hundred shots a class; the ring-up gets small weights by itself. Demodulation of the two
quadratures is folded into the weights.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from leakpipe.readout.densities import FloatArray

BINS = 20
DIRECTIONS = 2


def learn_weights(traces: list[NDArray[Any]], method: str) -> FloatArray:
    """Return weights (sample, quadrature, 2) that turn a trace into a point.

    Parameters
    ----------
    traces
        Per preparation (shot, sample, quadrature).
    method
        ``"discriminant"``, ``"matched filter"`` or ``"boxcar"``.
    """
    samples = traces[0].shape[1]
    if method == "boxcar":
        flat = np.zeros((samples, 2, DIRECTIONS))
        flat[:, 0, 0] = flat[:, 1, 1] = 1 / samples
        return flat
    edges = np.linspace(0, samples, min(BINS, samples) + 1).astype(int)
    binned = [
        np.add.reduceat(x.astype(np.float64), edges[:-1], axis=1) / np.diff(edges)[:, None]
        for x in traces
    ]
    features = [x.reshape(len(x), -1) for x in binned]
    if method == "matched filter":
        means = np.array([x.mean(axis=0) for x in features])
        noise = np.concatenate([x - x.mean(axis=0) for x in features]).var(axis=0)
        directions = (means[1:] - means[0]).T / noise[:, None]
    else:
        directions = _discriminant(features)
    if directions.shape[1] == 1:
        # One direction from two classes: the other is the same filter in the other quadrature.
        pairs = directions[:, 0].reshape(-1, 2)
        turned = np.stack([-pairs[:, 1], pairs[:, 0]], axis=1).ravel()
        directions = np.column_stack([directions[:, 0], turned])
    directions = directions[:, :DIRECTIONS] / np.linalg.norm(directions[:, :DIRECTIONS], axis=0)
    width = np.diff(edges)
    per_bin = directions.reshape(len(width), 2, DIRECTIONS) / width[:, None, None]
    return np.asarray(np.repeat(per_bin, width, axis=0))


def _discriminant(features: list[FloatArray]) -> FloatArray:
    from sklearn.discriminant_analysis import LinearDiscriminantAnalysis

    labels = np.repeat(np.arange(len(features)), [len(x) for x in features])
    model = LinearDiscriminantAnalysis(solver="eigen", shrinkage="auto")
    model.fit(np.concatenate(features), labels)
    return np.asarray(model.scalings_[:, : len(features) - 1])


def integrate(traces: NDArray[Any], weights: NDArray[np.float32]) -> NDArray[np.float32]:
    """Return points of traces.

    Parameters
    ----------
    traces
        (shot, column, sample, quadrature), int16 or float.
    weights
        (column, sample, quadrature, 2).
    """
    out = np.empty((*traces.shape[:2], DIRECTIONS), dtype=np.float32)
    shots, columns = traces.shape[:2]
    _integrate(
        np.ascontiguousarray(traces).reshape(shots, columns, -1),
        np.ascontiguousarray(
            weights.reshape(columns, -1, DIRECTIONS).transpose(0, 2, 1), dtype=np.float32
        ),
        out,
    )
    return out


@njit(cache=True, nogil=True, fastmath=True)
def _integrate(traces, weights, out):  # type: ignore[no-untyped-def]
    for i in range(traces.shape[0]):
        for c in range(traces.shape[1]):
            x = np.float32(0.0)
            y = np.float32(0.0)
            trace, first, second = traces[i, c], weights[c, 0], weights[c, 1]
            for s in range(trace.shape[0]):
                value = np.float32(trace[s])
                x += value * first[s]
                y += value * second[s]
            out[i, c, 0] = x
            out[i, c, 1] = y
