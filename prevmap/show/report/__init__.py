"""The report: one self-contained HTML page, readable on a phone and in print."""

from prevmap.show.report.content import ReportContent, ReportFigure
from prevmap.show.report.figures import report_figures
from prevmap.show.report.render import render_report

__all__ = ["ReportContent", "ReportFigure", "render_report", "report_figures"]
