"""Shared fixtures of the report's tests; the numbers behind them are invented."""

from __future__ import annotations

import pytest
from report_examples import patch_report

from leakpipe.report.figure_file import FigureFile
from leakpipe.report.figures import write_figures
from leakpipe.report.inputs import PatchReport


@pytest.fixture(scope="session")
def patch() -> PatchReport:
    """A distance-3 patch with every stage."""
    return patch_report()


@pytest.fixture(scope="session")
def bare() -> PatchReport:
    """The same patch before any stage ran."""
    return patch_report(stages=())


@pytest.fixture(scope="session")
def drawn(patch: PatchReport, tmp_path_factory: pytest.TempPathFactory) -> list[FigureFile]:
    """All figures of that patch; drawing them takes seconds, so once for all tests."""
    return write_figures(patch, tmp_path_factory.mktemp("drawn"))
