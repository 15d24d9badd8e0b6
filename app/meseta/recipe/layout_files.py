"""Writing a kept layout into a recipe file, which keeps its comments and everything else that stands in it."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import tomlkit
from tomlkit.exceptions import TOMLKitError
from tomlkit.items import InlineTable

from meseta.errors import RecipeError
from meseta.recipe.document import Recipe
from meseta.recipe.kept_layouts import KeptLayout, layout_table

__all__ = ["keep_in_file", "with_layout"]


def with_layout(recipe: Recipe, name: str, layout: KeptLayout, answered: Sequence[str] = ()) -> Recipe:
    """Return a recipe with a layout kept under a name; one that was kept under it before is replaced.

    Parameters
    ----------
    recipe : Recipe
    name : str
    layout : KeptLayout
    answered : sequence of str
        Entries of ``intake.channels`` that the layout holds from now on.

    Raises
    ------
    RecipeError
        Where the name is none for a layout.
    """
    settings = recipe.model_dump()["intake"]
    channels = {key: value for key, value in settings["channels"].items() if key not in answered}
    layouts = settings["layouts"] | {name: layout.model_dump()}
    return recipe.with_values("intake", layouts=layouts, channels=channels, use_layout=None)


def keep_in_file(
    path: str | Path, name: str, layout: KeptLayout, recipe: Recipe, answered: Sequence[str] = ()
) -> list[str]:
    """Write a layout under a name into a recipe file; return what was done beside, in sentences.

    A file that is there gets the layout and nothing else of ``recipe``; a new one gets all of ``recipe``.

    Raises
    ------
    RecipeError
        Where the file is no recipe, cannot be written, or the name is none for a layout.
    """
    path = Path(path)
    whole = with_layout(recipe, name, layout, answered)
    if not path.exists():
        _write(path, whole.text(comments=True))
        return []
    before = Recipe.load(path)
    document = _document(path)
    said = []
    if name in before.intake.layouts and before.intake.layouts[name] != layout:
        said.append(f"the layout '{name}' that was there is replaced")
    intake = _opened_out(document, "intake")
    moved = [key for key in answered if key in intake.get("channels", {})]
    for key in moved:
        del intake["channels"][key]
    if moved:
        said.append(f"moved from intake.channels into it: {', '.join(moved)}")
    if intake.get("use_layout", name) != name:
        said.append(f"intake.use_layout = '{intake.pop('use_layout')}' is taken out: files may fit any kept layout")
    table = layout_table(layout)
    table["channels"].add(tomlkit.nl())
    _opened_out(intake, "layouts", {key: layout_table(one) for key, one in before.intake.layouts.items()})[name] = table
    text = tomlkit.dumps(document)
    Recipe.parse(text, str(path), path.parent)  # what is written can be read
    _write(path, text)
    return said


def _opened_out(document: Any, name: str, content: Mapping[str, Any] | None = None) -> Any:
    """Return a table of a document, made where it is missing and opened out where it stands in one line."""
    if name not in document or isinstance(document[name], InlineTable):
        opened = tomlkit.table(is_super_table=content is not None)
        opened.update(document.pop(name, {}) if content is None else content)
        document.pop(name, None)
        document[name] = opened
    return document[name]


def _document(path: Path) -> Any:
    try:
        return tomlkit.parse(path.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError, TOMLKitError) as error:
        raise RecipeError(f"cannot be read ({error})", str(path), "choose another file") from error


def _write(path: Path, text: str) -> None:
    """Write a file whole or not at all."""
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        part.write_text(text, encoding="utf-8")
        part.replace(path)
    except OSError as error:
        part.unlink(missing_ok=True)
        raise RecipeError(f"cannot be written ({error.strerror})", str(path), "choose another place") from error
