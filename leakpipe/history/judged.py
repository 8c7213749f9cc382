"""A panel of the history with its chart."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leakpipe.history.chart import Chart, Floats, chart
from leakpipe.history.panel import Panel
from leakpipe.history.thresholds import threshold_for

QUBIT_LEAKAGE = "steady_leakage"


@dataclass(frozen=True)
class Judged:
    """One quantity over the epochs and what the chart says of it.

    Attributes
    ----------
    panel, chart
        The values, and the chart of them.
    shift
        What all qubits moved together by, taken off in each epoch, (epoch,).
    """

    panel: Panel
    chart: Chart
    shift: Floats

    @property
    def values(self) -> Floats:
        """Values on the chart's scale without the shift in common, (epoch, series)."""
        return self.panel.scaled - self.shift[:, np.newaxis]


def judge(one: Panel, *, in_common: bool = False, shift: Floats | None = None) -> Judged:
    """Run the chart over a panel.

    Parameters
    ----------
    one
        The panel.
    in_common
        Whether a shift that all its series share is found and taken off.
    shift
        A known shift to take off, (epoch,).
    """
    run = chart(one.scaled, one.error, in_common=in_common, shift=shift, raised=threshold_for)
    if in_common:
        shift = np.where(run.is_shared, np.nan_to_num(run.shared), 0.0)
    return Judged(one, run, np.zeros(len(one.epochs)) if shift is None else shift)
