"""Metadata that stands beside a file: in a sidecar, in its name, in a table with one row a file.

Later ones win over earlier ones, and over what the file says itself; where they contradict each other, a doubt says so.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from pathlib import Path

from meseta.intake.files import FoundFile
from meseta.intake.meaning.metadata import Plain, canonical
from meseta.intake.meaning.metadata_table import read_table
from meseta.intake.meaning.name_template import from_name
from meseta.intake.meaning.sidecars import sidecar, sidecars_in
from meseta.intake.opening import OpenContext
from meseta.recipe.intake import IntakeSettings

__all__ = ["batch_context", "beside", "recordings_among", "rows_without_file"]


def recordings_among(files: Sequence[FoundFile], settings: IntakeSettings) -> list[FoundFile]:
    """Return the files without the table of metadata, which may lie among them."""
    if settings.metadata_table is None or len(files) < 2:
        return list(files)
    table = Path(settings.metadata_table)
    return [file for file in files if file.path.name != table.name or file.path.resolve() != table.resolve()]


def rows_without_file(files: Sequence[FoundFile], context: OpenContext) -> list[str]:
    """Return a doubt about rows of the table of metadata that belong to none of the files; empty where all do."""
    known = {name for file in files for name in (str(file.path), file.name, file.path.name, file.path.stem)}
    lost = [name for name in context.table if name not in known]
    shown = ", ".join(lost[:3]) + (" ..." if len(lost) > 3 else "")
    return [f"{len(lost)} rows of the table of metadata belong to no file given: {shown}"] if lost else []


def batch_context(settings: IntakeSettings, paths: Sequence[Path] = ()) -> OpenContext:
    """Return what is the same for all files of a batch: the table of metadata, and which files have sidecars.

    Raises
    ------
    InputError
        Where the table cannot be read or has no column 'file'.
    """
    sidecars = sidecars_in({path.parent for path in paths}) if len(paths) > 1 else {}
    if settings.metadata_table is None:
        return OpenContext({}, sidecars)
    names = Counter(path.name for path in paths)
    return OpenContext(read_table(Path(settings.metadata_table)), sidecars, frozenset(n for n in names if names[n] > 1))


def beside(
    path: Path, name: str, settings: IntakeSettings, context: OpenContext, itself: Mapping[str, Plain]
) -> tuple[dict[str, Plain], list[str]]:
    """Return what is known of a file, under canonical names, with doubts: the table wins, then name, sidecar, file.

    Parameters
    ----------
    path : Path
    name : str
        Name relative to the folder that was given.
    settings : IntakeSettings
    context : OpenContext
    itself : mapping
        What the file says itself, under canonical names.
    """
    made, origin = dict(itself), dict.fromkeys(itself, "the file itself")
    doubts: list[str] = []

    def take(where: str, entries: Mapping[str, Plain]) -> None:
        found, more = canonical(entries, f"{path}, {where}")
        doubts.extend(more)
        for key, value in found.items():
            if key in made and made[key] != value:
                doubts.append(
                    f"{key} is {_said(made[key])} by {origin[key]} and {_said(value)} by {where}: the latter is used"
                )
            made[key], origin[key] = value, where

    entries, more = sidecar(path, context.sidecars.get(path.parent))
    doubts += more
    take("the file of metadata beside it", entries)
    if settings.name_template is not None:
        folders = settings.name_template.count("/")  # a file that was given alone lies in them all the same
        full = "/".join(path.absolute().parts[-folders - 1 :]) if folders > name.count("/") else name
        entries, more = from_name(full, settings.name_template)
        doubts += more
        take("its name", entries)
    if context.table:
        tails = ["/".join(path.absolute().parts[-depth:]) for depth in (4, 3, 2)]
        row = next((key for key in (str(path), name, *tails, path.name, path.stem) if key in context.table), None)
        if row is None:
            doubts.append(f"not in the table {settings.metadata_table}")
        else:
            if path.name in context.same_names and row in (path.name, path.stem) and name != path.name:
                doubts.append("its row in the table fits files of several folders: write the folder before the name")
            take("the table of metadata", context.table[row])
    return made, doubts


def _said(value: Plain) -> str:
    return f"'{value}'" if isinstance(value, str) else f"{value:g}"
