"""Right readings per qubit, with their interval."""

import numpy as np
import pytest
from report_examples import patch_report

from leakpipe.report.assignment import assignment, mean_of_two, wilson
from leakpipe.report.readout_table import readout_table


@pytest.mark.parametrize(
    ("hits", "trials", "low", "high"),
    [
        (81, 263, 0.2553, 0.3662),
        (15, 148, 0.0624, 0.1605),
        (0, 20, 0.0, 0.1611),
        (1, 29, 0.0061, 0.1718),
    ],
)
def test_wilson_limits(hits, trials, low, high):
    """Newcombe, Stat. Med. 17, 857 (1998), Table I, to the four printed decimals."""
    assert wilson(hits, trials) == pytest.approx((low, high), abs=0.5e-4)


def test_mean_of_two_covers():
    """The interval of a mean of two proportions near one holds it in about 95 of 100 samples.

    4000 samples: the standard error of the coverage is 0.0034, the bound is 4 of them around .95,
    widened upwards because intervals of counts cannot hit the level exactly.
    """
    rng = np.random.default_rng(5)
    truth, trials = (0.985, 0.97), 500
    inside = 0
    for hits in rng.binomial(trials, truth, (4000, 2)):
        _, low, high = mean_of_two(*((float(h), trials) for h in hits))
        inside += low <= sum(truth) / 2 <= high
    assert 0.95 - 4 * 0.0034 <= inside / 4000 <= 0.975


def test_assignment_of_a_qubit(patch, bare):
    """The value is the mean of the diagonal over 0 and 1; without a model it is not known."""
    table = patch.stages["model"]["assignment_as_prepared"].sel(qubit="D3").values
    found = assignment(patch, "D3")
    assert found.value == pytest.approx((table[0, 0] + table[1, 1]) / 2)
    assert found.low < found.value < found.high
    assert not assignment(bare, "D3").identifiable
    assert not assignment(patch, "nobody").identifiable


def test_diagnostics_follow_the_layout(patch, bare):
    """The readout table has the layout's qubits in its order, and columns for what is reported."""
    table = readout_table(patch)
    assert list(table.rows) == [*patch.layout.data, *patch.layout.measure]
    assert all(len(row) == len(table.heads) for row in table.rows.values())
    assert "decay 2 to 1 (%)" in table.heads
    assert readout_table(bare) is None


def test_diagnostics_without_optional_parts():
    """Diagnostics that a model does not report are left out, the others stay."""
    patch = patch_report(stages=("model",))
    slim = patch.stages["model"].drop_vars(["decay", "error_ratio", "preparation_weight"])
    patch.stages["model"] = slim
    table = readout_table(patch)
    assert not any("decay" in head for head in table.heads)
    assert any("misread true" in head for head in table.heads)
