"""What all commands share: options, the recipe they make, progress on a terminal, interruption."""

from __future__ import annotations

import json
import signal
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any, TypeVar

import click

from meseta.errors import CallError, InputError, MesetaError
from meseta.work import Progress, Work

if TYPE_CHECKING:
    from meseta.analysis import Analysis
    from meseta.recipe import Recipe

__all__ = [
    "RecipeChoice",
    "bad_plain",
    "json_option",
    "list_bad",
    "open_analysis",
    "recipe_from",
    "recipe_options",
    "say_passed_over",
    "strict_option",
    "tell",
    "working",
]

Command = TypeVar("Command", bound=Callable[..., Any])
RecipeChoice = tuple[str | None, str | None, Sequence[str]]
"""Recipe file, preset, and settings, as given on the command line."""
SHOWN_PASSED = 5


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


def tell(as_json: bool, answer: dict[str, Any], lines: Sequence[str]) -> None:
    """Print lines for people, and with ``--json`` the answer as the last line."""
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


def recipe_from(
    recipe_path: str | None, preset: str | None, settings: Sequence[str], base: Recipe | None = None
) -> Recipe:
    """Return the recipe that the options make; a preset leaves alone how the recordings of a study are read."""
    from meseta.recipe import Recipe

    if recipe_path and preset:
        raise CallError("--recipe and --preset were both given", "", "give one of them")
    if recipe_path:
        recipe = Recipe.load(recipe_path)
    elif preset:
        recipe = Recipe.preset(preset)
        if base is not None:
            recipe = recipe.model_copy(
                update={name: getattr(base, name) for name in ("intake", "calibration", "cutting")}
            )
    else:
        recipe = base or Recipe()
    return recipe.with_settings(settings)


def open_analysis(
    files: Sequence[str], choice: RecipeChoice, strict: bool, work: Work
) -> tuple[Analysis, list[MesetaError]]:
    """Open a study, or read recordings, and return the analysis with the files that could not be read.

    Rules that cannot be understood for these traces are found here, before any work.
    """
    from meseta.selection import check_rules

    analysis, bad = _opened(files, choice, strict, work)
    check_rules(analysis.traces, analysis.recipe.selection, analysis.decisions)
    return analysis, bad


def _opened(files: Sequence[str], choice: RecipeChoice, strict: bool, work: Work) -> tuple[Analysis, list[MesetaError]]:
    from meseta import study

    if any(study.is_study(path) for path in files):
        if len(files) > 1:
            raise CallError("a study is analysed alone", files[0], "gather recordings into it with `meseta gather`")
        opened = study.Study.open(files[0], read_only=True)
        return opened.analysis(recipe_from(*choice, base=opened.recipe), work), []
    from meseta.analysis import Analysis

    recipe = recipe_from(*choice)
    traces = study.read(list(files), recipe, work)
    bad: list[MesetaError] = [InputError(**one) for one in traces.notes.get("bad_files", ())]
    list_bad(bad, strict)
    say_passed_over(traces.notes.get("passed_over", ()))
    return Analysis(traces, recipe), bad


def list_bad(bad: Sequence[MesetaError], strict: bool) -> None:
    """List bad files on stderr; with ``--strict`` refuse to go on."""
    for error in bad:
        click.echo(f"meseta: {error}", err=True)
    if bad and strict:
        raise InputError(
            f"{len(bad)} bad file{'s' if len(bad) > 1 else ''} (listed above)",
            "",
            "mend or leave out, or run without --strict",
        )


def say_passed_over(passed: Sequence[str]) -> None:
    """Say on stderr what folders hold beside recordings."""
    if passed:
        more = f", and {len(passed) - SHOWN_PASSED} more" if len(passed) > SHOWN_PASSED else ""
        click.echo(f"meseta: passed over: {', '.join(passed[:SHOWN_PASSED])}{more}", err=True)


def bad_plain(bad: Sequence[MesetaError]) -> list[dict[str, str]]:
    """Return bad files as plain values."""
    return [{"what": error.what, "where": error.where, "remedy": error.remedy} for error in bad]
