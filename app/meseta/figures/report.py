"""The report: one HTML file that needs nothing else, reads on a screen and prints well."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from jinja2 import Environment, FileSystemLoader, StrictUndefined

from meseta import typeset
from meseta.analysis import Analysis
from meseta.figures import rows
from meseta.figures.checks import correlation_figure, noise_figure, offset_figure, record_figure
from meseta.figures.methods import METHOD_SOURCES, methods_paragraphs
from meseta.figures.page import face_style, svg_text
from meseta.figures.result import result_figure
from meseta.histograms import TemporalHistogram, temporal_histogram
from meseta.recipe.histogram import TemporalSettings
from meseta.resources import resource
from meseta.work import Work

__all__ = ["report"]

_MOST_COLUMNS = 1500


def report(analysis: Analysis, summary: Mapping[str, Any], title: str = "", work: Work | None = None) -> str:
    """Return the report of an analysis as a self-contained HTML page.

    Parameters
    ----------
    analysis : Analysis
        Results that are not at hand are computed.
    summary : mapping
        What :func:`~meseta.figures.summary` returned for the same analysis.
    title : str
        Name of the recording.
    work : Work, optional

    Returns
    -------
    str
        HTML with inline SVG, no link to anything outside, every text escaped.
    """
    work = work or Work()
    figures = _figures(analysis, title, work)
    pages = Environment(
        loader=FileSystemLoader(resource("figures")),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return pages.get_template("report.html.jinja").render(
        title=title or "Result",
        summary=summary,
        figures=figures,
        face=face_style("".join(figures.values())),
        tables=_tables(analysis, summary, work),
        methods=methods_paragraphs(analysis, work),
        sources=METHOD_SOURCES,
        integer=typeset.integer,
        percent=typeset.percent,
    )


def _figures(analysis: Analysis, title: str, work: Work) -> dict[str, str]:
    """Return the figures as SVG elements, in which every text is escaped."""
    settings = analysis.recipe.figure
    made = {
        "result": result_figure(
            analysis.histogram(work),
            analysis.result("displacement_histogram", work),
            analysis.result("peaks", work),
            settings,
            title,
            analysis.recipe.displacement_histogram,
        ),
        "record": record_figure(_record(analysis, work), settings),
        "correlation": correlation_figure(analysis.result("correlation_histogram", work), settings),
        "noise": noise_figure(analysis.noise(work), settings),
    }
    offset = analysis.traces.notes.get("floor_offset") or {}
    if offset.get("removed"):
        made["offset"] = offset_figure(offset, settings)
    return {name: svg_text(figure, name) for name, figure in made.items()}


def _record(analysis: Analysis, work: Work) -> TemporalHistogram:
    """Return the temporal histogram, with wider columns where there would be more of them than the paper shows."""
    asked = analysis.recipe.temporal.traces_a_column
    column = max(asked, -(-analysis.traces.traces // _MOST_COLUMNS))
    settings = TemporalSettings(traces_a_column=column)
    return temporal_histogram(analysis.result("counts", work), analysis.selection(work).kept, settings)


def _tables(analysis: Analysis, summary: Mapping[str, Any], work: Work) -> dict[str, Any]:
    fit = analysis.result("peaks", work)
    return {
        "peaks": rows.peak_rows(fit.table),
        "quoted": rows.quoted_rows(fit.table),
        "systematic": rows.systematic_rows(fit),
        "rules": rows.rule_rows(summary["traces"]),
        "exclusions": rows.exclusion_rows(summary["histogram"]),
        "noise": rows.noise_rows(analysis.noise(work), analysis.traces.drive.unit),
        "settings": rows.setting_rows(analysis.recipe),
        "notes": _notes(summary["notes"]),
        "check_up": rows.check_up_parts(summary.get("calibration_check")),
        "check_up_notes": rows.check_up_notes(summary.get("calibration_check")),
    }


def _notes(notes: Mapping[str, Any]) -> list[tuple[str, list[str]]]:
    """Return what intake said of the recordings, as (heading, lines); warnings stand elsewhere."""
    entries = []
    for name, value in notes.items():
        if name not in ("warnings", "bad_files") and value not in (None, "", [], {}):
            drawn = ("at_trace", "offset") if name == "floor_offset" else ()
            shown = {key: one for key, one in value.items() if key not in drawn} if drawn else value
            entries.append((name.replace("_", " "), _lines(shown)))
    return entries


def _lines(value: Any) -> list[str]:
    if isinstance(value, Mapping):
        return [f"{str(name).replace('_', ' ')}: {_inline(entry)}" for name, entry in value.items()]
    if isinstance(value, list | tuple):
        return [_inline(entry) for entry in value]
    return [_inline(value)]


def _inline(value: Any) -> str:
    if isinstance(value, Mapping):
        return ", ".join(f"{str(name).replace('_', ' ')} {_inline(entry)}" for name, entry in value.items())
    if isinstance(value, list | tuple):
        if len(value) == 2 and all(isinstance(entry, float) for entry in value):  # lowest and highest
            return " to ".join(_inline(entry) for entry in value)
        return ", ".join(_inline(entry) for entry in value)
    return typeset.number(value, 6) if isinstance(value, float) else str(value)
