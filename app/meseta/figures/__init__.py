"""Publication figures, tables, methods statement and report.

The only room that knows matplotlib, and never its pyplot.
"""

from meseta.figures.page import save_figure, save_pages, svg_text
from meseta.figures.result import result_figure

__all__ = ["result_figure", "save_figure", "save_pages", "svg_text"]
