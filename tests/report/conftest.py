"""Shared fixtures of the report's tests; the numbers behind them are invented."""

from __future__ import annotations

import pytest
from report_examples import patch_report

from leakpipe.report.inputs import PatchReport


@pytest.fixture(scope="session")
def patch() -> PatchReport:
    """A distance-3 patch with every stage."""
    return patch_report()


@pytest.fixture(scope="session")
def bare() -> PatchReport:
    """The same patch before any stage ran."""
    return patch_report(stages=())
