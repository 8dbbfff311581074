"""One report for all tests of the page."""

from __future__ import annotations

import pytest
from report_scene import make_inputs

from volmap.report import ReportInput, report


@pytest.fixture(scope="session")
def inputs() -> ReportInput:
    return make_inputs(6)


@pytest.fixture(scope="session")
def page(inputs: ReportInput) -> str:
    return report(inputs)
