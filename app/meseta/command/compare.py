"""The command that compares recordings, or parts of one, and tells the molecular yield against a blank."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from meseta.command.frame import RecipeChoice, json_option, open_analysis, recipe_options, tell, working
from meseta.errors import CallError

if TYPE_CHECKING:
    from meseta.analysis import Analysis
    from meseta.histograms import Comparison, Difference, Yield
    from meseta.work import Work

__all__ = ["compare"]

Range = tuple[float, float]


@click.command()
@click.argument("recordings", nargs=-1, required=True, type=click.Path())
@click.option(
    "--by", "column", help="Compare parts of one recording: selection, group, or a column of its trace table."
)
@click.option(
    "--blank", "blank_path", type=click.Path(), help="Recording without the molecule, for difference and yield."
)
@click.option(
    "--window", "window_g0", nargs=2, type=float, help="Conductance of the molecule in G0: the yield is told."
)
@click.option("--efficiency", default=1.0, show_default=True, help="Share of molecules that the plateau finder finds.")
@click.option("--efficiency-error", default=0.0, show_default=True, help="Standard error of that share.")
@click.option("--plant", is_flag=True, help="Measure that share: plant plateaus into the blank and look for them.")
@click.option("--scale", default=1.0, show_default=True, help="Factor of the blank in the difference.")
@click.option("--fit-range", "fit_range_g0", nargs=2, type=float, help="Fit that factor where both must agree, in G0.")
@click.option("--out", "out_path", type=click.Path(path_type=Path), help="Histograms to a .csv, .h5 or .npz file.")
@recipe_options
@json_option
def compare(
    recordings: tuple[str, ...],
    column: str | None,
    blank_path: str | None,
    window_g0: Range | None,
    efficiency: float,
    efficiency_error: float,
    plant: bool,
    scale: float,
    fit_range_g0: Range | None,
    out_path: Path | None,
    recipe_path: str | None,
    preset: str | None,
    settings: tuple[str, ...],
    as_json: bool,
) -> None:
    """Compare recordings (files, folders or studies, each by itself) on one axis; the first with a blank in full."""
    from meseta.analysis import yield_in_window

    _check(recordings, column, blank_path, window_g0, plant, fit_range_g0)
    choice = (recipe_path, preset, settings)
    with working() as work:
        opened = {Path(path).name: open_analysis([path], choice, False, work)[0] for path in recordings}
        first = next(iter(opened.values()))
        blank = None if blank_path is None else _blank(blank_path, first, choice, work)
        comparison = _compared(opened, column, blank, work)
        change = None
        if blank is not None:
            fitted = fit_range_g0 is not None
            change = comparison.difference(0, len(comparison.parts) - 1, None if fitted else scale, fit_range_g0)
        found = None
        if window_g0 is not None:
            if plant and blank is not None:
                efficiency, efficiency_error = _planted(first, blank, window_g0, work)
            found = yield_in_window(first, window_g0, blank, efficiency, efficiency_error, work)
        if out_path is not None:
            _write(comparison, change, out_path, first)
    answer: dict[str, Any] = {
        "parts": [_part(one) for one in comparison.parts],
        "density_unit": comparison.density_unit,
        "notes": list(comparison.notes),
    }
    if change is not None:
        answer["scale"] = {"value": change.scale, "low": change.scale_low, "high": change.scale_high}
    if found is not None:
        answer["yield"] = _plain(asdict(found))
    tell(as_json, answer | ({} if out_path is None else {"out": str(out_path)}), _lines(comparison, change, found))


def _check(
    recordings: tuple[str, ...],
    column: str | None,
    blank_path: str | None,
    window_g0: Range | None,
    plant: bool,
    fit_range_g0: Range | None,
) -> None:
    """Find what cannot be before any work."""
    if column is not None and (len(recordings) > 1 or blank_path is not None):
        raise CallError("--by compares parts of one recording", "--by", "give one recording and no --blank")
    if len({Path(path).name for path in recordings}) < len(recordings):
        raise CallError("two recordings have the same name", "compare", "rename one of them")
    if blank_path is None and (plant or fit_range_g0 is not None):
        raise CallError("--plant and --fit-range need a blank", "--blank", "give the recording without the molecule")
    if plant and window_g0 is None:
        raise CallError("--plant needs the molecule's conductance", "--window", "give --window LOW HIGH in G0")
    for name, ends in (("--window", window_g0), ("--fit-range", fit_range_g0)):
        if ends is not None and not 0 < ends[0] < ends[1]:
            raise CallError(f"{ends[0]:g} to {ends[1]:g} G0 is no range", name, "give the lower end first, above 0")


def _blank(path: str, first: Analysis, choice: RecipeChoice, work: Work) -> Analysis:
    """Return the blank, analysed with the recipe of the recording that it is a blank of."""
    from meseta.recipe import Recipe

    blank, _ = open_analysis([path], choice, False, work)
    same: Recipe = first.recipe.model_copy(update={"calibration": blank.recipe.calibration})
    return blank.with_recipe(same)


def _compared(opened: dict[str, Analysis], column: str | None, blank: Analysis | None, work: Work) -> Comparison:
    from meseta.analysis import compare_parts, compare_recordings

    if column is not None:
        return compare_parts(next(iter(opened.values())), column, work)
    return compare_recordings(opened | ({} if blank is None else {"blank": blank}), work)


def _planted(first: Analysis, blank: Analysis, window_g0: Range, work: Work) -> tuple[float, float]:
    """Return the efficiency with which molecules like those found are found in the blank's traces."""
    from meseta.analysis import phases_of
    from meseta.histograms import window_efficiency
    from meseta.segmentation import expect

    detection = expect(
        blank.traces,
        blank.recipe.plateaus,
        blank.noise(work),
        blank.result("alignment", work),
        phases_of(blank.recipe.histogram.direction),
        blank=True,
        work=work,
    )
    plateaus = first.plateaus(work)
    efficiency, error = window_efficiency(
        detection, plateaus.take(first.selection(work).kept[plateaus.trace]), window_g0
    )
    if not efficiency > 0:
        raise CallError(
            "no plateau lies in the window, so no efficiency follows", "--plant", "give --efficiency instead"
        )
    return efficiency, error


def _write(comparison: Comparison, change: Difference | None, path: Path, first: Analysis) -> None:
    from meseta.analysis import save_result
    from meseta.analysis.saving import save_results

    if change is not None and path.suffix.lower() in (".h5", ".hdf5"):
        save_results({"comparison": comparison, "difference": change}, path, first)
    else:
        save_result(comparison, path, first)


def _part(part: Any) -> dict[str, Any]:
    drawn = part.resampling
    return {
        "name": part.name,
        "traces": part.histogram.traces,
        "effective_traces": drawn.effective_traces,
        "reason": drawn.reason,
        "resampling": drawn.scheme,
    }


def _lines(comparison: Comparison, change: Difference | None, found: Yield | None) -> list[str]:
    lines = [f"{part.name}: {part.resampling.statement()}" for part in comparison.parts]
    lines += comparison.notes
    if change is not None:
        how = "fitted" if change.scale_is_fitted else "as given"
        span = f" ({change.scale_low:.3g} to {change.scale_high:.3g})" if change.scale_is_fitted else ""
        lines.append(f"scale of the blank: {change.scale:.3g}{span}, {how}")
    if found is not None:
        lines.append(found.text)
        if found.blank_traces and found.hits:
            lines.append(
                f"false discoveries: {100 * found.false_discovery:.2g} % of {found.hits:,} plateau traces, "
                f"at most {100 * found.false_discovery_high:.2g} %"
            )
    return lines


def _plain(values: dict[str, Any]) -> dict[str, Any]:
    """Return values that JSON can hold; None for numbers that are not finite."""
    import math

    return {
        name: None if isinstance(value, float) and not math.isfinite(value) else value for name, value in values.items()
    }
