"""The commands beside the main job: example, expect, sheet, simulate, decay."""

from __future__ import annotations

import math
from dataclasses import asdict, fields, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import click

from meseta.command.frame import json_option, open_analysis, recipe_options, tell, working
from meseta.errors import CallError

if TYPE_CHECKING:
    from meseta.segmentation import Expectation

__all__ = ["decay", "example", "expect", "sheet", "simulate"]


@click.command()
@click.option(
    "--out", "folder", default="meseta-result", type=click.Path(path_type=Path), help="Folder for the result."
)
@json_option
def example(folder: Path, as_json: bool) -> None:
    """Do the main job on the bundled recording."""
    from meseta.command.jobs import run_lines, run_one
    from meseta.resources import sample
    from meseta.run import check_output

    with working() as work:
        check_output(folder)
        outcome = run_one([str(sample("night_raw.h5"))], folder, (None, None, ()), False, work)
    tell(as_json, outcome.summary | {"out": str(folder)}, run_lines(outcome))


@click.command()
@click.argument("study_path", metavar="STUDY", type=click.Path())
@click.option("--blank", is_flag=True, help="The traces are known to hold no molecule: use all of them.")
@click.option(
    "--slope", "slope_decades", default=0.0, show_default=True, help="Slope of the planted plateaus in decades per nm."
)
@click.option(
    "--plateaus-each",
    default=200,
    show_default=True,
    type=click.IntRange(1),
    help="Plateaus planted for each conductance and length.",
)
@click.option("--seed", default=0, show_default=True, type=click.IntRange(0), help="Of the random choice of traces.")
@click.option(
    "--out", "out_path", type=click.Path(path_type=Path), help="Keep the result: .json (all) or .csv (table)."
)
@recipe_options
@json_option
def expect(
    study_path: str,
    blank: bool,
    slope_decades: float,
    plateaus_each: int,
    seed: int,
    out_path: Path | None,
    recipe_path: str | None,
    preset: str | None,
    settings: tuple[str, ...],
    as_json: bool,
) -> None:
    """Say what the plateau finder does on traces like these: efficiency, false plateaus, bias, limits."""
    from meseta import segmentation
    from meseta.analysis import phases_of
    from meseta.command.printed import expectation_answer, expectation_lines

    if out_path is not None and out_path.suffix.lower() not in (".json", ".csv"):
        raise CallError(f"'{out_path.name}' ends in neither .json nor .csv", "--out", "name the file so")
    with working() as work:
        analysis, _ = open_analysis([study_path], (recipe_path, preset, settings), False, work)
        found = segmentation.expect(
            analysis.traces,
            analysis.recipe.plateaus,
            analysis.noise(work),
            analysis.result("alignment", work),
            phases_of(analysis.recipe.histogram.direction),
            slope_decades=slope_decades,
            each=plateaus_each,
            blank=blank,
            seed=seed,
            work=work,
        )
    if out_path is not None:
        _keep_expectation(found, out_path)
    tell(as_json, expectation_answer(found), expectation_lines(found))


def _keep_expectation(found: Expectation, path: Path) -> None:
    """Write what the plateau finder does: everything as JSON, or the grid as CSV."""
    import json

    from meseta.tables import write_csv

    try:
        if path.suffix.lower() == ".csv":
            write_csv(path, found.columns())
        else:
            path.write_text(json.dumps(found.plain(), indent=1) + "\n", encoding="utf-8")
    except OSError as error:
        raise CallError(f"cannot write: {error.strerror or error}", str(path), "choose another place") from error


@click.command()
@click.argument("study_path", metavar="STUDY", type=click.Path())
@click.option("--out", "sheet_path", required=True, type=click.Path(path_type=Path), help="A .pdf file.")
@click.option(
    "--by",
    type=click.Choice(["random", "group", "doubt"]),
    default="random",
    show_default=True,
    help="Which traces: at random, of one group, or the least certain first.",
)
@click.option("--group", default="", help="Name of the group, with --by group.")
@click.option("--traces", "count", default=48, show_default=True, type=click.IntRange(1), help="Most traces to draw.")
@click.option("--seed", default=0, show_default=True, type=click.IntRange(0), help="Of the random choice.")
@recipe_options
@json_option
def sheet(
    study_path: str,
    sheet_path: Path,
    by: Literal["random", "group", "doubt"],
    group: str,
    count: int,
    seed: int,
    recipe_path: str | None,
    preset: str | None,
    settings: tuple[str, ...],
    as_json: bool,
) -> None:
    """Print a contact sheet of traces with their plateaus."""
    import numpy as np

    from meseta import segmentation
    from meseta.figures import contact_sheet, save_pages

    if sheet_path.suffix.lower() != ".pdf":
        raise CallError(f"'{sheet_path.name}' does not end in .pdf", "--out", "a contact sheet is a PDF file")
    with working() as work:
        analysis, _ = open_analysis([study_path], (recipe_path, preset, settings), False, work)
        plateaus, groups = analysis.plateaus(work), analysis.selection(work).group
        direction = analysis.traces.table["direction"] == analysis.recipe.histogram.direction
        candidates = np.flatnonzero(direction)
        mine = plateaus.take(direction[plateaus.trace])
        renumbered = replace(mine, trace=np.searchsorted(candidates, mine.trace))
        chosen = segmentation.choose_traces(
            renumbered, len(candidates), count, by, group=groups[candidates], name=group, seed=seed
        )
        rows = candidates[chosen]
        pages = contact_sheet(analysis.traces, plateaus, rows, analysis.recipe.figure)
        save_pages(pages, sheet_path)
    answer = {"out": str(sheet_path), "traces": rows.tolist(), "pages": len(pages)}
    tell(as_json, answer, [f"{len(rows)} traces on {len(pages)} pages: {sheet_path}"])


@click.command()
@click.argument("kind")
@click.option("--traces", default=1000, show_default=True, type=click.IntRange(1), help="Number of openings.")
@click.option("--seed", default=1, show_default=True, type=click.IntRange(0), help="Same seed, same recording.")
@click.option("--out", "out_path", required=True, type=click.Path(path_type=Path), help=".h5, .csv, or a folder.")
@click.option("--truth", "truth_path", type=click.Path(path_type=Path), help="CSV of the true plateaus.")
@click.option("--raw", is_flag=True, help="One continuous recording of piezo and amplifier volts.")
@click.option(
    "--layout",
    default="auto",
    show_default=True,
    help="How cut traces are laid out: rows, groups, flat (HDF5); wide, long (one table); files (a folder).",
)
@click.option("--set", "words", multiple=True, metavar="NAME=VALUE", help="A setting of the simulation; see --list.")
@click.option(
    "--list",
    "listing",
    is_flag=True,
    expose_value=False,
    is_eager=True,
    help="List the settings and leave.",
    callback=lambda context, _, value: _list_settings(context) if value else None,
)
@json_option
def simulate(
    kind: str,
    traces: int,
    seed: int,
    out_path: Path,
    truth_path: Path | None,
    raw: bool,
    layout: str,
    words: tuple[str, ...],
    as_json: bool,
) -> None:
    """Simulate a recording with known truth.  KIND: metal, molecule, mixture, blank, tunnelling."""
    from meseta.simulate import SimulationSettings, write_simulation

    settings = SimulationSettings().with_words(words)
    with working() as work:
        written = write_simulation(
            kind, traces, seed, out_path, truth_path, raw, layout=layout, settings=settings, work=work
        )
    plain = {name: str(value) if isinstance(value, Path) else value for name, value in asdict(written).items()}
    tell(as_json, plain, [written.sentence()])


def _list_settings(context: click.Context) -> Any:
    from meseta.simulate import SimulationSettings

    for info in SimulationSettings.describe():
        unit = f" ({info.unit})" if info.unit else ""
        choices = f" [{' | '.join(info.choices)}]" if info.choices else ""
        click.echo(f"{info.name} = {info.default}: {info.title}{unit}{choices}. {info.help}".rstrip())
    context.exit()


@click.command()
@click.argument("points", type=click.Path())
@click.option("--length-unit", default="", help="What a length counts: nm, angstrom, carbon, ring ...")
@click.option("--out", "figure_path", type=click.Path(path_type=Path), help="Draw the fit: .pdf, .svg or .png.")
@json_option
def decay(points: str, length_unit: str, figure_path: Path | None, as_json: bool) -> None:
    """Fit the decay constant of a length series.

    POINTS is a CSV file with columns length, conductance_g0 and optional length_error, conductance_error_g0, label.
    """
    from meseta import peaks
    from meseta.command.printed import decay_lines

    result = peaks.decay(peaks.read_points(points, length_unit))
    if figure_path is not None:
        from meseta.figures import decay_figure, save_figure
        from meseta.recipe import Recipe

        save_figure(decay_figure(result, Recipe().figure), figure_path)
    names = [field.name for field in fields(result) if field.name not in ("points", "line", "notes")]
    answer = {name: _finite(getattr(result, name)) for name in names}
    tell(as_json, answer | {"length_unit": result.points.length_unit, "notes": list(result.notes)}, decay_lines(result))


def _finite(value: float) -> float | None:
    """Return a number that JSON can hold; None where there is none."""
    return value if math.isfinite(value) else None
