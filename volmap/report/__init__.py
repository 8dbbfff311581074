"""A map and its evidence as one page that opens anywhere."""

from volmap.report.inputs import ReportInput
from volmap.report.page import report

__all__ = ["ReportInput", "report"]
