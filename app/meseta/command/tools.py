"""The commands beside the main job: example, expect, sheet, simulate, decay."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import Any

import click

from meseta.command.frame import json_option, tell, working

__all__ = ["example", "simulate"]


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
