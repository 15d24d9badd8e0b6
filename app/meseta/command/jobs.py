"""The commands of the main job: window, peek, run, gather, recipe."""

from __future__ import annotations

import contextlib
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import click

from meseta.command.frame import (
    RecipeChoice,
    bad_plain,
    json_option,
    list_bad,
    recipe_from,
    recipe_options,
    say_passed_over,
    strict_option,
    tell,
    working,
)
from meseta.command.keeping import peek_and_keep
from meseta.command.large import opened_for_run
from meseta.command.physics import physics_lines, spread_lines
from meseta.command.printed import check_lines, result_lines, study_answer, study_lines
from meseta.errors import CallError, Cancelled, InputError, MesetaError
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.run import RunResult

__all__ = ["gather", "peek", "recipe", "run", "run_lines", "run_one", "window"]


@click.command()
@click.argument("files", nargs=-1, type=click.Path())
@recipe_options
@json_option
def window(
    files: tuple[str, ...] = (),
    recipe_path: str | None = None,
    preset: str | None = None,
    settings: tuple[str, ...] = (),
    as_json: bool = False,
) -> None:
    """Open the window, on a study or on recordings."""
    recipe = recipe_from(recipe_path, preset, settings) if recipe_path or preset or settings else None
    try:
        from meseta.window import open_window
    except ImportError as error:
        raise CallError(
            f"the window cannot be opened ({error})",
            "",
            "install Qt's system libraries as the README says; all other commands work without",
        ) from error
    code = open_window([str(path) for path in files], recipe)
    tell(as_json, {"exit": code}, [])
    if code:
        raise click.exceptions.Exit(code)


@click.command()
@click.argument("files", nargs=-1, required=True, type=click.Path())
@click.option("--keep-layout", "keep_name", metavar="NAME", help="Keep what was recognised as a layout of that name.")
@click.option("--recipe-out", type=click.Path(path_type=Path), help="Recipe file to keep it in, new or there already.")
@recipe_options
@strict_option
@json_option
def peek(
    files: tuple[str, ...],
    keep_name: str | None,
    recipe_out: Path | None,
    recipe_path: str | None,
    preset: str | None,
    settings: tuple[str, ...],
    strict: bool,
    as_json: bool,
) -> None:
    """Check files: what was recognised, what would be assumed and why, what is odd."""
    from meseta import intake, study

    recipe = recipe_from(recipe_path, preset, settings)
    if keep_name is not None or recipe_out is not None:
        peek_and_keep(files, recipe, keep_name, recipe_out, strict, as_json)
        return
    studies = [path for path in files if study.is_study(path)]
    others = [path for path in files if path not in studies]
    with working() as work:
        checks, bad = intake.describe(others, recipe, work) if others else ([], [])
        answers = [study_answer(path, work) for path in studies] + [check.as_dict() for check in checks]
    list_bad(bad, strict)
    say_passed_over(intake.find_files(others)[1] if others else [])
    lines = [line for answer in answers[: len(studies)] for line in study_lines(answer)]
    lines += check_lines([check.lines() for check in checks])
    tell(as_json, {"files": answers, "bad_files": bad_plain(bad)}, lines)


@click.command()
@click.argument("files", nargs=-1, required=True, type=click.Path())
@click.option("--out", "folder", required=True, type=click.Path(path_type=Path), help="Folder for the result.")
@click.option("--each", is_flag=True, help="Every file or folder is a recording of its own, in DIR/name/.")
@click.option(
    "--all-analyses",
    is_flag=True,
    help="Fit the peaks under every defensible choice too: analyses.csv, analyses.pdf.",
)
@recipe_options
@strict_option
@json_option
def run(
    files: tuple[str, ...],
    folder: Path,
    each: bool,
    all_analyses: bool,
    recipe_path: str | None,
    preset: str | None,
    settings: tuple[str, ...],
    strict: bool,
    as_json: bool,
) -> None:
    """Do the whole job: tables, figures, report and study of recordings or of a study."""
    from meseta.run import check_output

    with working() as work:
        if not each:
            check_output(folder)
            outcome = run_one(files, folder, (recipe_path, preset, settings), strict, work, all_analyses)
            tell(as_json, outcome.summary | {"out": str(folder)}, run_lines(outcome))
            return
        summaries, bad = _run_each(files, folder, (recipe_path, preset, settings), strict, work, all_analyses)
    lines = [line for one in summaries for line in (one.folder.name, *run_lines(one))]
    answer = {
        "out": str(folder),
        "recordings": {one.folder.name: one.summary for one in summaries},
        "bad_files": bad_plain(bad),
    }
    tell(as_json, answer, lines)


def run_lines(outcome: RunResult) -> list[str]:
    """Return what a finished run prints."""
    summary = outcome.summary
    lines = result_lines(summary, outcome.folder)
    return [*lines[:-2], *physics_lines(summary), *spread_lines(summary.get("all_analyses", [])), *lines[-2:]]


def run_one(
    files: Sequence[str], folder: Path, choice: RecipeChoice, strict: bool, work: Work, all_analyses: bool = False
) -> RunResult:
    """Do the whole job on one recording or study; errors after work began have exit code 1."""
    from meseta.run import run_analysis

    with opened_for_run(files, folder, choice, strict, work) as (analysis, bad, named):
        sources = analysis.traces.sources
        title = Path(sources[0].name).stem if len(sources) == 1 else f"{len(sources)} recordings"
        try:
            return run_analysis(analysis, folder, work, bad, title, named, all_analyses)
        except MesetaError as error:
            raise _later(error) from error


def _later(error: MesetaError) -> MesetaError:
    """Return an error of work that had begun: exit code 1, unless the user stopped it."""
    if error.exit_code == 2:
        error.exit_code = 1
    return error


def _run_each(
    files: Sequence[str], folder: Path, choice: RecipeChoice, strict: bool, work: Work, all_analyses: bool
) -> tuple[list[RunResult], list[MesetaError]]:
    from meseta import intake

    done: list[RunResult] = []
    bad: list[MesetaError] = []
    for path in intake.expand(files):
        name = _free_name(Path(path).name.split(".")[0] or "recording", {one.folder.name for one in done})
        try:
            done.append(run_one([str(path)], folder / name, choice, strict, work, all_analyses))
        except Cancelled:
            raise
        except MesetaError as error:
            bad.append(error)
    list_bad(bad, strict)
    if not done:
        raise InputError("none of the recordings could be analysed", str(folder), "see the lines above")
    return done, bad


def _free_name(name: str, taken: set[str]) -> str:
    number, free = 2, name
    while free in taken:
        free, number = f"{name}-{number}", number + 1
    return free


@click.command()
@click.argument("files", nargs=-1, type=click.Path())
@click.option("--into", "study_path", required=True, type=click.Path(path_type=Path), help="Study to add to.")
@click.option("--follow", is_flag=True, help="Keep taking in new files until interrupted.")
@recipe_options
@strict_option
@json_option
def gather(
    files: tuple[str, ...],
    study_path: Path,
    follow: bool,
    recipe_path: str | None,
    preset: str | None,
    settings: tuple[str, ...],
    strict: bool,
    as_json: bool,
) -> None:
    """Add recordings to a study without analysing them.

    A folder stands for all files in it and in its subfolders. A file is read once: what the study has is passed over,
    and a file that has changed since is named and left out. With --follow a file is taken once it is whole.
    """
    from meseta import intake, study

    if not files:
        raise CallError("no files were given", "gather", "name files or a folder")
    recipe = recipe_from(recipe_path, preset, settings) if recipe_path or preset or settings else None
    with working() as work:
        answer, bad = study.gather(files, study_path, recipe, work, follow, say=_say if follow else None)
        stopped = follow and work.cancel.is_set()
    if not follow:
        list_bad(bad, strict)
        with contextlib.suppress(InputError):  # nothing but what was gathered before and has gone since
            say_passed_over(intake.find_files(files)[1])
    lines = [f"{answer['recordings_added']} recordings added to {study_path}, {answer['traces']} traces in all"]
    tell(as_json, answer | {"bad_files": bad_plain(bad)}, lines)
    if stopped:
        raise click.exceptions.Exit(130)


def _say(error: MesetaError) -> None:
    """Tell of a bad file as soon as it is met."""
    from tqdm import tqdm

    tqdm.write(f"meseta: {error}", file=sys.stderr)


@click.command()
@click.option("--preset", help="A preset: metal or molecule.")
@click.option("--set", "settings", multiple=True, metavar="SECTION.FIELD=VALUE", help="Change one setting.")
@json_option
def recipe(preset: str | None, settings: tuple[str, ...], as_json: bool) -> None:
    """Print a complete recipe with a comment for every setting."""
    made = recipe_from(None, preset, settings)
    tell(as_json, made.model_dump(mode="json"), [made.text(comments=True).rstrip()])
