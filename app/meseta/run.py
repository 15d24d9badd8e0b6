"""The whole job: from recordings to a folder of tables, figures, report and study, whole or not at all."""

from __future__ import annotations

import json
import os
import shutil
import tempfile
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.analysis import Analysis
from meseta.errors import MesetaError, OutputError
from meseta.tables import write_csv
from meseta.work import Work

__all__ = [
    "RESULT_FILES",
    "RunResult",
    "check_output",
    "length_columns",
    "nearest_folder",
    "run_analysis",
    "trace_columns",
]

RESULT_FILES = (
    "summary.json",
    "traces.csv",
    "plateaus.csv",
    "histogram.csv",
    "peaks.csv",
    "lengths.csv",
    "histogram2d.npz",
    "correlation2d.npz",
    "recipe.toml",
    "study.h5",
    "figure.pdf",
    "figure.svg",
    "figure.png",
    "report.html",
    "analyses.csv",
    "analyses.pdf",
)
"""Every file of a result folder; a folder that holds anything else is never replaced."""


@dataclass(frozen=True)
class RunResult:
    """What a run left behind: the folder, and the content of its ``summary.json``."""

    folder: Path
    summary: dict[str, Any]


def check_output(folder: Path) -> None:
    """Raise OutputError unless ``folder`` may become a result folder.

    A missing or empty folder may; an earlier result may be replaced; anything else is refused.
    """
    if folder.exists() and not folder.is_dir():
        raise OutputError("is a file, not a folder", str(folder), "choose another --out")
    parent = nearest_folder(folder)
    try:
        # permissions do not tell everything (read-only or virtual file systems): the place itself decides
        Path(tempfile.mkdtemp(prefix=".meseta-", dir=parent)).rmdir()
    except OSError as error:
        remedy = "choose another --out or change its permissions"
        raise OutputError(f"cannot be written to ({error.strerror})", str(parent), remedy) from error
    if not folder.exists():
        return
    try:
        names = sorted(entry.name for entry in folder.iterdir())
    except OSError as error:
        raise OutputError(f"cannot be read ({error.strerror})", str(folder), "choose another --out") from error
    foreign = [name for name in names if name not in RESULT_FILES]
    if foreign:
        raise OutputError(
            f"holds files of other origin ({foreign[0]})", str(folder), "choose an empty folder for --out"
        )
    if names and not _is_result(folder / "summary.json"):
        raise OutputError("is neither empty nor an earlier result of Meseta", str(folder), "choose an empty folder")


def nearest_folder(folder: Path) -> Path:
    """Return the closest existing folder above ``folder``, in which the result is prepared."""
    parent = folder.absolute().parent
    while not parent.exists():
        parent = parent.parent
    if not parent.is_dir():
        raise OutputError("is a file, not a folder", str(parent), "choose another --out")
    return parent


def _is_result(summary: Path) -> bool:
    try:
        return "meseta_version" in json.loads(summary.read_text(encoding="utf-8")).get("versions", {})
    except (OSError, ValueError, AttributeError):
        return False


@contextmanager
def whole_folder(folder: Path) -> Iterator[Path]:
    """Give a temporary folder beside ``folder`` that takes its place if, and only if, the block succeeds."""
    check_output(folder)
    target = folder.absolute()
    made = _missing_parents(target)
    target.parent.mkdir(parents=True, exist_ok=True)
    partial = Path(tempfile.mkdtemp(prefix=f".{target.name}-", suffix="-unfinished", dir=target.parent))
    try:
        yield partial
        partial.chmod(0o777 & ~_umask())
        _swap(partial, target)
    except BaseException:
        shutil.rmtree(partial, ignore_errors=True)
        for parent in made:
            if parent.exists() and not any(parent.iterdir()):
                parent.rmdir()
        raise


def _missing_parents(target: Path) -> list[Path]:
    return [parent for parent in target.parents if not parent.exists()]


def _umask() -> int:
    current = os.umask(0)
    os.umask(current)
    return current


def _swap(partial: Path, target: Path) -> None:
    """Put ``partial`` in the place of ``target``; an earlier result is removed only after that."""
    earlier = None
    if target.exists():
        earlier = target.with_name(f".{target.name}-earlier-{os.getpid()}")
        target.rename(earlier)
    try:
        partial.rename(target)
    except OSError as error:
        if earlier is not None:
            earlier.rename(target)
        raise OutputError(f"cannot be made ({error.strerror})", str(target), "choose another --out") from error
    if earlier is not None:
        shutil.rmtree(earlier)


def trace_columns(analysis: Analysis, work: Work | None = None) -> dict[str, npt.NDArray[Any]]:
    """Return the columns of ``traces.csv``: one row a trace, with what became of it and every user column."""
    traces, selection = analysis.traces, analysis.selection(work)
    measures = analysis.result("measures", work)
    in_nm = traces.drive.is_displacement
    unknown = np.full(traces.traces, np.nan)
    table = traces.table
    columns: dict[str, npt.NDArray[Any]] = {
        "trace": np.arange(traces.traces),
        "source": np.array([traces.sources[row].name for row in table["source"]], np.str_),
        "specimen": table["specimen"],
        "session": table["session"],
        "direction": table["direction"],
        "record_start": table["record_start"],
        "samples": traces.lengths,
        "displacement_span_nm": measures.drive_span if in_nm else unknown,
        "rupture_displacement_nm": measures.rupture_drive if in_nm else unknown,
        "kept": selection.kept,
        "reason": selection.reason,
        "group": selection.group,
        "length_drive": measures.drive_span,
        "drive_unit": np.full(traces.traces, traces.drive.unit),
    }
    extra = {name: column for name, column in measures.columns().items() if name not in ("drive_span", "rupture_drive")}
    columns |= extra
    columns |= {name: column for name, column in table.items() if name not in columns}
    return columns


def length_columns(analysis: Analysis, work: Work | None = None) -> dict[str, npt.NDArray[Any]]:
    """Return the columns of ``lengths.csv``: one row a bin of the histograms of lengths, then of tunnelling slopes."""
    found = [*analysis.result("length_histograms", work), analysis.result("slope_histogram", work)]
    bins = [len(one.counts) for one in found]

    def repeated(values: list[Any]) -> npt.NDArray[Any]:
        return np.repeat(np.array(values), bins)

    return {
        "histogram": repeated([one.kind for one in found]),
        "low": np.concatenate([one.edges[:-1] for one in found]),
        "high": np.concatenate([one.edges[1:] for one in found]),
        "unit": repeated([one.unit for one in found]),
        "counts": np.concatenate([one.counts for one in found]),
        "censored_counts": np.concatenate([one.censored_counts for one in found]),
        "density": np.concatenate([one.density for one in found]),
        "density_unit": repeated([one.density_unit for one in found]),
        "traces": repeated([one.traces for one in found]),
        "none": repeated([one.none for one in found]),
        "over": repeated([one.over for one in found]),
    }


def run_analysis(
    analysis: Analysis,
    folder: Path,
    work: Work,
    bad_files: Sequence[MesetaError] = (),
    title: str = "",
    files: Sequence[str | Path] = (),
    all_analyses: bool = False,
) -> RunResult:
    """Do every step, and fill ``folder`` with the result, whole or not at all.

    ``files`` is what the traces were read from, so that the study of the result can keep the recordings.
    ``all_analyses`` fits the peaks under every defensible choice too: ``analyses.csv``, ``analyses.pdf``, and their
    spread in the summary (``all_analyses``); nothing of it where no peak was fitted.

    Raises
    ------
    OutputError
        Where the folder cannot be used.
    Cancelled
        Where the user stopped; the folder is then as it was before.
    """
    from meseta import figures, study

    with whole_folder(folder) as partial:
        histogram = analysis.histogram(work)
        fit = analysis.result("peaks", work)
        displacement = analysis.result("displacement_histogram", work)
        correlation = analysis.result("correlation_histogram", work)
        work.tell("writing the result", 0, 4, "parts")
        write_csv(partial / "traces.csv", trace_columns(analysis, work))
        write_csv(partial / "plateaus.csv", analysis.plateaus(work).columns())
        write_csv(partial / "histogram.csv", histogram.table().columns())
        write_csv(partial / "peaks.csv", fit.table.columns())
        write_csv(partial / "lengths.csv", length_columns(analysis, work))
        np.savez_compressed(partial / "histogram2d.npz", **displacement_arrays(displacement))
        np.savez_compressed(
            partial / "correlation2d.npz",
            edges_g0=correlation.grid.edges_g0,
            correlation=correlation.correlation,
            correlation_low=correlation.correlation_low,
            correlation_high=correlation.correlation_high,
            traces=correlation.traces,
            threshold=correlation.threshold,
        )
        analysis.recipe.save(partial / "recipe.toml")
        work.tell("writing the result", 1, 4, "parts")
        study.write_study(partial / "study.h5", analysis, work, files, "study made by a run")
        work.tell("writing the result", 2, 4, "parts")
        frame = analysis.recipe.displacement_histogram
        figure = figures.result_figure(histogram, displacement, fit, analysis.recipe.figure, title, frame)
        for suffix in ("pdf", "svg", "png"):
            figures.save_figure(figure, partial / f"figure.{suffix}")
        work.tell("writing the result", 3, 4, "parts")
        summary = figures.summary(analysis, bad_files)
        check = study.check_calibration(partial / "study.h5", analysis.recipe, files, work)
        summary["calibration_check"] = check.as_dict()
        summary["warnings"] = [*summary["warnings"], *check.doubts()]
        if all_analyses and np.isfinite(fit.table.position_g0).any():
            summary["all_analyses"] = _write_analyses(partial, analysis, work)
        (partial / "report.html").write_text(figures.report(analysis, summary, title), encoding="utf-8")
        (partial / "summary.json").write_text(json.dumps(summary, indent=1, allow_nan=False), encoding="utf-8")
        work.tell("writing the result", 4, 4, "parts")
    return RunResult(folder, summary)


def _write_analyses(folder: Path, analysis: Analysis, work: Work) -> list[dict[str, Any]]:
    """Write the table and the figure of all defensible analyses; return the spread of every peak as plain rows."""
    from meseta import figures
    from meseta.analysis import defensible_analyses

    found = defensible_analyses(analysis, work)
    write_csv(folder / "analyses.csv", found.columns())
    spread = found.spread()
    pages = [
        figures.analyses_figure(**vars(found.of_peak(str(peak))), settings=analysis.recipe.figure, title=f"peak {peak}")
        for peak, number in zip(spread.peak, spread.analyses, strict=True)
        if number
    ]
    if pages:
        figures.save_pages(pages, folder / "analyses.pdf")
    columns = {name: column.tolist() for name, column in spread.columns().items()}
    rows = [{name: column[row] for name, column in columns.items()} for row in range(len(spread))]
    return [{name: None if value != value else value for name, value in row.items()} for row in rows]


def displacement_arrays(result: Any) -> dict[str, Any]:
    """Return the arrays of ``histogram2d.npz``."""
    return {
        "edges_g0": result.grid.edges_g0,
        "drive_edges": result.drive_edges,
        "drive_unit": result.drive_unit,
        "counts": result.counts,
        "density": result.density,
        "density_unit": result.density_unit,
        "traces": result.traces,
        "not_aligned": result.not_aligned,
    }
