"""The command line.  Light to start: a command loads only what it needs."""

from __future__ import annotations

import json
import os
import signal
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from meseta import __version__
from meseta.errors import CallError, Cancelled, InputError, MesetaError
from meseta.work import Progress, Work

if TYPE_CHECKING:
    from meseta.analysis import Analysis
    from meseta.recipe import Recipe
    from meseta.run import RunResult

__all__ = ["main"]

Command = TypeVar("Command", bound=Callable[..., Any])


# -- the frame: errors, progress, interruption ------------------------------------------------------------------------


def main(arguments: Sequence[str] | None = None) -> None:
    """Run the command line and leave with its exit code; no traceback ever reaches the user."""
    sys.exit(_outcome(list(sys.argv[1:] if arguments is None else arguments)))


def _outcome(arguments: list[str]) -> int:
    as_json = "--json" in arguments
    try:
        cli.main(arguments, prog_name="meseta", standalone_mode=False)
    except MesetaError as error:
        return _complain(error, as_json)
    except click.UsageError as error:
        name = error.ctx.command_path if error.ctx else "meseta"
        return _complain(CallError(error.format_message(), "", f"see {name} --help"), as_json)
    except (KeyboardInterrupt, click.Abort):
        return _complain(Cancelled(), as_json)
    except BrokenPipeError:
        sys.stdout = None  # type: ignore[assignment]  # the reader has gone; there is nobody to tell
        return 0
    except (OSError, MemoryError) as error:
        return _complain(
            MesetaError(
                f"{error.strerror or error}" if isinstance(error, OSError) else "out of memory",
                str(getattr(error, "filename", "") or ""),
            ),
            as_json,
        )
    except Exception as error:
        if os.environ.get("MESETA_DETAILS"):
            raise
        fault = MesetaError(
            f"a fault of Meseta itself ({type(error).__name__}: {error})",
            "",
            "run again with MESETA_DETAILS=1 set and report what it prints",
        )
        return _complain(fault, as_json)
    return 0


def _complain(error: MesetaError, as_json: bool) -> int:
    click.echo(f"meseta: {error}", err=True)
    if as_json:
        told = {"what": error.what, "where": error.where, "remedy": error.remedy, "exit": error.exit_code}
        click.echo(json.dumps({"error": told}))
    return error.exit_code


@contextmanager
def working() -> Iterator[Work]:
    """Give a Work with a progress bar on a terminal; the first interruption cancels it, the second one kills."""
    bar = _Bar() if sys.stderr.isatty() else None
    work = Work(report=bar.show) if bar else Work()

    def interrupt(_: int, __: Any) -> None:
        if work.cancel.is_set():
            raise KeyboardInterrupt
        work.cancel.set()

    earlier = {name: signal.signal(name, interrupt) for name in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield work
    finally:
        for name, handler in earlier.items():
            signal.signal(name, handler)
        if bar:
            bar.close()


class _Bar:
    """One progress bar that becomes the next one as the work moves on."""

    def __init__(self) -> None:
        self._bar: Any = None
        self._label = ""

    def show(self, progress: Progress) -> None:
        from tqdm import tqdm

        if progress.label != self._label or self._bar is None:
            self.close()
            self._label = progress.label
            self._bar = tqdm(
                total=progress.total or None,
                desc=progress.label,
                unit=f" {progress.unit}",
                leave=False,
                file=sys.stderr,
            )
        self._bar.update(progress.done - self._bar.n)

    def close(self) -> None:
        if self._bar is not None:
            self._bar.close()
            self._bar = None


def _tell(as_json: bool, answer: dict[str, Any], lines: Sequence[str]) -> None:
    for line in lines:
        click.echo(line)
    if as_json:
        click.echo(json.dumps(answer, allow_nan=False))


json_option = click.option("--json", "as_json", is_flag=True, help="Print a machine-readable last line.")
strict_option = click.option("--strict", is_flag=True, help="Stop with exit code 2 if any file is bad.")


def recipe_options(command: Command) -> Command:
    """Add the options that make a recipe."""
    command = click.option(
        "--set", "settings", multiple=True, metavar="SECTION.FIELD=VALUE", help="Change one setting; may be repeated."
    )(command)
    command = click.option("--preset", help="Start from a preset: metal or molecule.")(command)
    return click.option("--recipe", "recipe_path", type=click.Path(), help="Start from a recipe file.")(command)


def _recipe(recipe_path: str | None, preset: str | None, settings: Sequence[str], base: Recipe | None = None) -> Recipe:
    from meseta.recipe import Recipe

    if recipe_path and preset:
        raise CallError("--recipe and --preset were both given", "", "give one of them")
    if recipe_path:
        recipe = Recipe.load(recipe_path)
    elif preset:
        recipe = Recipe.preset(preset)
    else:
        recipe = base or Recipe()
    return recipe.with_settings(settings)


# -- the commands -----------------------------------------------------------------------------------------------------


@click.group(invoke_without_command=True, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="meseta", message="%(prog)s %(version)s")
@click.pass_context
def cli(context: click.Context) -> None:
    """Conductance traces of atomic contacts and single-molecule junctions: from raw recordings to fitted peaks.

    Without a command the window opens.
    """
    if context.invoked_subcommand is None:
        context.invoke(window)


@cli.command()
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
    recipe = _recipe(recipe_path, preset, settings) if recipe_path or preset or settings else None
    try:
        from meseta.window import open_window
    except ImportError as error:
        raise CallError(
            f"the window cannot be opened ({error})",
            "",
            "install Qt's system libraries as the README says; all other commands work without",
        ) from error
    code = open_window([str(path) for path in files], recipe)
    _tell(as_json, {"exit": code}, [])
    if code:
        raise click.exceptions.Exit(code)


@cli.command()
@click.argument("files", nargs=-1, required=True, type=click.Path())
@recipe_options
@strict_option
@json_option
def peek(
    files: tuple[str, ...],
    recipe_path: str | None,
    preset: str | None,
    settings: tuple[str, ...],
    strict: bool,
    as_json: bool,
) -> None:
    """Check files: what was recognised, what would be assumed and why, what is odd."""
    from meseta import study

    recipe = _recipe(recipe_path, preset, settings)
    with working() as work:
        checks, bad = study.describe(files, recipe, work)
    _list_bad(bad, strict)
    lines = [line for check in checks for line in check.lines()]
    _tell(as_json, {"files": [check.as_dict() for check in checks], "bad_files": _bad_plain(bad)}, lines)


@cli.command()
@click.argument("files", nargs=-1, required=True, type=click.Path())
@click.option("--out", "folder", required=True, type=click.Path(path_type=Path), help="Folder for the result.")
@click.option("--each", is_flag=True, help="Every file or folder is a recording of its own, in DIR/name/.")
@recipe_options
@strict_option
@json_option
def run(
    files: tuple[str, ...],
    folder: Path,
    each: bool,
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
            outcome = _run_one(files, folder, (recipe_path, preset, settings), strict, work)
            _tell(as_json, outcome.summary | {"out": str(folder)}, _peak_lines(outcome))
            return
        summaries, bad = _run_each(files, folder, (recipe_path, preset, settings), strict, work)
    lines = [line for summary in summaries for line in _peak_lines(summary)]
    answer = {
        "out": str(folder),
        "recordings": {one.folder.name: one.summary for one in summaries},
        "bad_files": _bad_plain(bad),
    }
    _tell(as_json, answer, lines)


RecipeChoice = tuple[str | None, str | None, Sequence[str]]


def _run_one(files: Sequence[str], folder: Path, choice: RecipeChoice, strict: bool, work: Work) -> RunResult:
    from meseta.run import run_analysis

    analysis, bad = _analysis(files, choice, strict, work)
    title = Path(files[0]).stem if len(files) == 1 else f"{len(files)} recordings"
    try:
        return run_analysis(analysis, folder, work, bad, title)
    except MesetaError as error:
        raise _later(error) from error


def _later(error: MesetaError) -> MesetaError:
    """Return an error of work that had begun: exit code 1, unless the user stopped it."""
    if error.exit_code == 2:
        error.exit_code = 1
    return error


def _analysis(
    files: Sequence[str], choice: RecipeChoice, strict: bool, work: Work
) -> tuple[Analysis, list[MesetaError]]:
    """Open a study, or read recordings, and return the analysis with the files that could not be read."""
    from meseta import study

    if any(study.is_study(path) for path in files):
        if len(files) > 1:
            raise CallError("a study is analysed alone", files[0], "gather recordings into it with `meseta gather`")
        opened = study.Study.open(files[0], read_only=True)
        return opened.analysis(_recipe(*choice, base=opened.recipe), work), []
    from meseta.analysis import Analysis

    recipe = _recipe(*choice)
    traces = study.read(list(files), recipe, work)
    bad = [InputError(**one) for one in traces.notes.get("bad_files", ())]
    _list_bad(bad, strict)
    return Analysis(traces, recipe), bad


def _run_each(
    files: Sequence[str], folder: Path, choice: RecipeChoice, strict: bool, work: Work
) -> tuple[list[RunResult], list[MesetaError]]:
    from meseta import intake

    done: list[RunResult] = []
    bad: list[MesetaError] = []
    for path in intake.expand(files):
        name = _free_name(Path(path).name.split(".")[0] or "recording", {one.folder.name for one in done})
        try:
            done.append(_run_one([str(path)], folder / name, choice, strict, work))
        except Cancelled:
            raise
        except MesetaError as error:
            bad.append(error)
    _list_bad(bad, strict)
    if not done:
        raise InputError("none of the recordings could be analysed", str(folder), "see the lines above")
    return done, bad


def _free_name(name: str, taken: set[str]) -> str:
    number, free = 2, name
    while free in taken:
        free, number = f"{name}-{number}", number + 1
    return free


def _list_bad(bad: Sequence[MesetaError], strict: bool) -> None:
    for error in bad:
        click.echo(f"meseta: {error}", err=True)
    if bad and strict:
        raise InputError(
            f"{len(bad)} bad file{'s' if len(bad) > 1 else ''} (listed above)",
            "",
            "mend or leave out, or run without --strict",
        )


def _bad_plain(bad: Sequence[MesetaError]) -> list[dict[str, str]]:
    return [{"what": error.what, "where": error.where, "remedy": error.remedy} for error in bad]


def _peak_lines(outcome: RunResult) -> list[str]:
    """Return the peak table and the places of the files, for people."""
    from meseta.figures import summary_lines

    return summary_lines(outcome.summary, outcome.folder)


@cli.command()
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
    """Add recordings to a study without analysing them."""
    from meseta import study

    if not files:
        raise CallError("no files were given", "gather", "name files or a folder")
    recipe = _recipe(recipe_path, preset, settings) if recipe_path or preset or settings else None
    with working() as work:
        answer, bad = study.gather(files, study_path, recipe, work, follow)
    _list_bad(bad, strict)
    lines = [f"{answer['recordings_added']} recordings added to {study_path}, {answer['traces']} traces in all"]
    _tell(as_json, answer | {"bad_files": _bad_plain(bad)}, lines)


@cli.command()
@click.option("--preset", help="A preset: metal or molecule.")
@click.option("--set", "settings", multiple=True, metavar="SECTION.FIELD=VALUE", help="Change one setting.")
@json_option
def recipe(preset: str | None, settings: tuple[str, ...], as_json: bool) -> None:
    """Print a complete recipe with a comment for every setting."""
    made = _recipe(None, preset, settings)
    _tell(as_json, made.model_dump(mode="json"), [made.text(comments=True).rstrip()])
