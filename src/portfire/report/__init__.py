"""The report of a finished run: figures and one page."""

from portfire.report._draw import draw_report

__all__ = ["draw_report"]
