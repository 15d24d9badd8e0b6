"""Publication figures, tables, methods statement and report.

The only room that knows matplotlib, and never its pyplot.
"""

from meseta.figures.checks import correlation_figure, noise_figure, offset_figure, record_figure
from meseta.figures.methods import methods_statement
from meseta.figures.page import save_figure, save_pages, svg_text
from meseta.figures.physics import analyses_figure, decay_figure
from meseta.figures.report import report
from meseta.figures.result import result_figure
from meseta.figures.sheet import contact_sheet
from meseta.figures.summary import summary

__all__ = [
    "analyses_figure",
    "contact_sheet",
    "correlation_figure",
    "decay_figure",
    "methods_statement",
    "noise_figure",
    "offset_figure",
    "record_figure",
    "report",
    "result_figure",
    "save_figure",
    "save_pages",
    "summary",
    "svg_text",
]
