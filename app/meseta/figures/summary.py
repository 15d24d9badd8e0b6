"""The summary of a run: plain values for ``summary.json`` and the report."""

from __future__ import annotations

import platform
from collections import Counter
from collections.abc import Sequence
from dataclasses import fields, is_dataclass
from importlib.metadata import PackageNotFoundError, version
from typing import Any, Final

import numpy as np

from meseta import __version__
from meseta.analysis import Analysis
from meseta.errors import MesetaError
from meseta.figures.cautions import cautions
from meseta.peaks import PeakFit, peak_physics
from meseta.tables import Table
from meseta.work import Work

__all__ = ["summary"]

_LIBRARIES: Final = ("numpy", "scipy", "numba", "h5py", "pyarrow", "pydantic", "matplotlib")


def summary(analysis: Analysis, bad_files: Sequence[MesetaError] = (), work: Work | None = None) -> dict[str, Any]:
    """Return what a run did, as plain values that JSON can hold (numbers that are not finite are None).

    Parameters
    ----------
    analysis : Analysis
        Results that are not at hand are computed.
    bad_files : sequence of MesetaError
        Files that were given and could not be read.
    work : Work, optional

    Returns
    -------
    dict
        ``versions``, ``inputs``, ``bad_files``, ``recipe``, ``traces``, ``record``, ``noise``, ``plateaus``,
        ``histogram``, ``displacement_histogram``, ``correlation_histogram``, ``peaks``, ``physics``, ``notes`` and
        ``warnings``; the help page "results" describes each.
    """
    work = work or Work()
    fit = analysis.result("peaks", work)
    content = {
        "versions": _versions(),
        "inputs": [_record(source) for source in analysis.traces.sources],
        "bad_files": [{"what": bad.what, "where": bad.where, "remedy": bad.remedy} for bad in bad_files],
        "recipe": analysis.recipe.model_dump(mode="json"),
        "traces": _traces(analysis, work),
        "record": _along_the_record(analysis, work),
        "noise": _record(analysis.noise(work), leave_arrays=True),
        "plateaus": _plateaus(analysis, work),
        "histogram": _histogram(analysis, work),
        "displacement_histogram": _displacement(analysis, work),
        "correlation_histogram": _correlation(analysis, work),
        "peaks": _rows(fit.table),
        "systematic": [
            {
                "choice": shift.choice,
                "kind": shift.kind,
                "position_moves_by_g0": shift.moves_by_g0.tolist(),
                "counted": shift.counted,
            }
            for shift in fit.shifts
        ],
        "fit_deviance_per_degree_of_freedom": fit.goodness,
        "physics": _physics(analysis, fit, work),
        "notes": dict(analysis.traces.notes),
        "warnings": cautions(analysis, bad_files, work),
    }
    plain: dict[str, Any] = _plain(content)
    return plain


def _physics(analysis: Analysis, fit: PeakFit, work: Work) -> dict[str, Any]:
    """Return series resistance, published values and junction formation, as they follow from the peaks."""
    plateaus, kept = analysis.plateaus(work), analysis.selection(work).kept
    worth = analysis.result("resampling", work).effective_traces
    return peak_physics(fit.table, plateaus.take(kept[plateaus.trace]), int(np.sum(kept)), worth).plain()


def _versions() -> dict[str, str]:
    found = {"meseta_version": __version__, "python": platform.python_version()}
    for name in _LIBRARIES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            found[name] = "unknown"
    return found


def _traces(analysis: Analysis, work: Work) -> dict[str, Any]:
    selection, resampling = analysis.selection(work), analysis.result("resampling", work)
    direction = Counter(str(name) for name in analysis.traces.table["direction"])
    return {
        "read": analysis.traces.traces,
        "samples": analysis.traces.samples,
        "opening": direction.get("opening", 0),
        "closing": direction.get("closing", 0),
        "kept": int(np.sum(selection.kept)),
        "dropped": int(np.sum(~selection.kept)),
        "reasons": dict(Counter(str(reason) for reason in selection.reason[~selection.kept]).most_common()),
        "rules": _rows(selection.steps),
        "unmatched_decisions": list(selection.unmatched),
        "effective": resampling.effective_traces,
        "effective_reason": resampling.reason,
        "resampling": resampling.scheme,
        "block_traces": resampling.block_traces,
    }


def _along_the_record(analysis: Analysis, work: Work) -> dict[str, Any]:
    """Return what is said of the record in time: what its traces are worth, memory, drift."""
    memory, drift = analysis.result("record_memory", work), analysis.result("drift", work)
    return {
        "worth": analysis.result("resampling", work).statement(),
        "memory": memory.text,
        "memory_traces": memory.decay_traces,
        "drift": drift.text,
        "drift_moved": drift.moved,
        "drift_moved_low": drift.moved_low,
        "drift_moved_high": drift.moved_high,
        "drift_unit": drift.unit,
        "drift_p_peak": drift.p_peak,
        "drift_p_shape": drift.p_shape,
    }


def _plateaus(analysis: Analysis, work: Work) -> dict[str, Any]:
    table, kept = analysis.plateaus(work), analysis.selection(work).kept
    inside = kept[table.trace]
    return {
        "found": len(table),
        "in_kept_traces": int(np.sum(inside)),
        "kinds": dict(Counter(str(kind) for kind in table.kind[inside]).most_common()),
        "censored": int(np.sum(table.censored[inside] != "")),
    }


def _histogram(analysis: Analysis, work: Work) -> dict[str, Any]:
    histogram = analysis.histogram(work)
    return {
        "axis": histogram.grid.axis,
        "bins": histogram.grid.bins,
        "low_g0": histogram.edges_g0[0],
        "high_g0": histogram.edges_g0[-1],
        "traces": histogram.traces,
        "samples": int(np.sum(histogram.counts)),
        "excluded": dict(histogram.excluded),
        "density_unit": histogram.density_unit,
        "resampling": histogram.scheme,
        "weak_bins": int(np.sum(histogram.traces_in_bin < histogram.weak_traces)),
    }


def _displacement(analysis: Analysis, work: Work) -> dict[str, Any]:
    plane = analysis.result("displacement_histogram", work)
    return {
        "traces": plane.traces,
        "not_aligned": plane.not_aligned,
        "samples": int(np.sum(plane.counts)),
        "drive_unit": plane.drive_unit,
        "density_unit": plane.density_unit,
    }


def _correlation(analysis: Analysis, work: Work) -> dict[str, Any]:
    result = analysis.result("correlation_histogram", work)
    return {"traces": result.traces, "bins": result.grid.bins, "threshold": result.threshold}


def _rows(table: Table) -> list[dict[str, Any]]:
    columns = {name: column.tolist() for name, column in table.columns().items()}
    return [{name: column[row] for name, column in columns.items()} for row in range(len(table))]


def _record(record: Any, leave_arrays: bool = False) -> dict[str, Any]:
    assert is_dataclass(record)
    values = {field.name: getattr(record, field.name) for field in fields(record)}
    return {name: value for name, value in values.items() if not (leave_arrays and isinstance(value, np.ndarray))}


def _plain(value: Any) -> Any:
    """Return a value made of dict, list, str, int, float, bool and None alone."""
    if isinstance(value, dict):
        return {str(name): _plain(entry) for name, entry in value.items()}
    if isinstance(value, np.ndarray):
        return _plain(value.tolist())
    if isinstance(value, list | tuple | set | frozenset):
        return [_plain(entry) for entry in value]
    if isinstance(value, np.generic):
        return _plain(value.item())
    if isinstance(value, float) and not np.isfinite(value):
        return None
    return value if isinstance(value, str | int | float | bool | None) else str(value)
