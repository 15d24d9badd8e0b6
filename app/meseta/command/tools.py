"""The commands beside the main job: example, expect, sheet, simulate, decay."""

from __future__ import annotations

import math
from dataclasses import asdict, fields
from pathlib import Path
from typing import Any

import click

from meseta.command.frame import json_option, tell, working

__all__ = ["decay", "example", "simulate"]


@click.command()
@click.option(
    "--out", "folder", default="meseta-result", type=click.Path(path_type=Path), help="Folder for the result."
)
@json_option
def example(folder: Path, as_json: bool) -> None:
    """Do the main job on the bundled recording."""
    from meseta.command.jobs import run_one
    from meseta.command.printed import result_lines
    from meseta.resources import sample
    from meseta.run import check_output

    with working() as work:
        check_output(folder)
        outcome = run_one([str(sample("night_raw.h5"))], folder, (None, None, ()), False, work)
    tell(as_json, outcome.summary | {"out": str(folder)}, result_lines(outcome.summary, outcome.folder))


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
