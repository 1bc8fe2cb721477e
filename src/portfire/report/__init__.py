"""The report of a finished run: figures and one page."""

from portfire.report._draw import draw_report
from portfire.report._whole import draw_reports, run

__all__ = ["draw_report", "draw_reports", "run"]
