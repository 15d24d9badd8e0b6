"""``meseta peek --keep-layout``: what was recognised is kept in a recipe file as a layout of a name."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from meseta.command.frame import bad_plain, list_bad, tell, working
from meseta.command.printed import check_lines
from meseta.errors import CallError, InputError

if TYPE_CHECKING:
    from meseta.intake import Description
    from meseta.recipe import Recipe
    from meseta.recipe.kept_layouts import KeptLayout
    from meseta.work import Work

__all__ = ["peek_and_keep"]


def peek_and_keep(
    files: Sequence[str], recipe: Recipe, name: str | None, path: Path | None, strict: bool, as_json: bool
) -> None:
    """Check files of one layout, and write it into a recipe file under a name.

    Raises
    ------
    CallError
        Where name or file is not given.
    InputError
        Where the files are of more than one layout.
    """
    from meseta import study
    from meseta.intake.meaning.kept_layouts import answered_by
    from meseta.recipe.kept_layouts import check_layout_name
    from meseta.recipe.layout_files import keep_in_file

    if name is None or path is None:
        raise CallError("--keep-layout and --recipe-out go together", "peek", "give the name and the recipe file")
    try:
        check_layout_name(name)
    except ValueError as error:
        raise CallError(str(error), "--keep-layout", "choose another name") from error
    if any(study.is_study(file) for file in files):
        raise CallError("a study is no recording", "peek --keep-layout", "give recordings")
    with working() as work:
        checks, bad, used = _checked(files, recipe, name, work)
    list_bad(bad, strict)
    layout = _only_layout(checks)
    answered = answered_by(layout, used.intake.channels)
    said = keep_in_file(path, name, layout, used, answered)
    lines = [*check_lines([check.lines() for check in checks]), f"layout '{name}' kept in {path}", *said]
    kept = {"name": name, "recipe": str(path), "layout": layout.model_dump(mode="json"), "notes": said}
    tell(
        as_json,
        {"files": [check.as_dict() for check in checks], "bad_files": bad_plain(bad), "kept_layout": kept},
        lines,
    )


def _checked(
    files: Sequence[str], recipe: Recipe, name: str, work: Work
) -> tuple[list[Description], list[InputError], Recipe]:
    """Return the checks, the bad files and the recipe used; what fits no kept layout is recognised anew."""
    from meseta import intake
    from meseta.intake.meaning.kept_layouts import LayoutError, recognised_anew

    bad: list[InputError] = []
    try:
        checks, bad = intake.describe(files, recipe, work)
    except LayoutError as error:
        checks, bad = [], [error]
    misfit = next((error for error in bad if isinstance(error, LayoutError)), None)
    if misfit is None:
        return checks, bad, recipe
    anew = recognised_anew(recipe, misfit.seen, name)
    return *intake.describe(files, anew, work), anew


def _only_layout(checks: Sequence[Description]) -> KeptLayout:
    """Return the layout of all files; an error names the first that has another."""
    from meseta.intake.meaning.layout_differences import differences

    first = max(checks, key=lambda check: check.pieces > 1)
    for check in checks:
        if unlike := differences(first.form, check.form, check.pieces):
            raise InputError(
                f"is of another layout than {first.file}: {'; '.join(unlike)}",
                check.file,
                "keep each layout under a name of its own",
            )
    return first.form
