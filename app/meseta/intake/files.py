"""Which files are meant by what the user gave: files, folders, globs; in natural order."""

from __future__ import annotations

import glob
import os
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from natsort import natsorted, ns

from meseta.errors import InputError, printable

__all__ = ["FoundFile", "expand", "find_files"]

_ASIDE: Final = frozenset(
    {"readme", "license", "licence", "notes", "changelog", "copying", "authors", "thumbs", "desktop"}
)
_ASIDE_ENDINGS: Final = frozenset({
    ".md", ".rst", ".toml", ".ini", ".cfg", ".yaml", ".yml", ".json", ".xml", ".html", ".htm", ".pdf", ".png",
    ".jpg", ".jpeg", ".svg", ".tif", ".tiff", ".gif", ".py", ".m", ".ipynb", ".r", ".doc", ".docx", ".xls", ".xlsx",
    ".ppt", ".pptx", ".odt", ".ods", ".log", ".tmp", ".part", ".lock", ".bak", ".exe", ".dll", ".so", ".tex",
    ".bib", ".sha256", ".md5", ".tdms_index",
})  # fmt: skip
PathLike = str | Path


@dataclass(frozen=True)
class FoundFile:
    """A file, and its name relative to what the user gave."""

    path: Path
    name: str


def _matches(given: PathLike) -> list[Path]:
    """Return what one path or pattern means; a path that exists is never read as a pattern."""
    path = Path(given)
    try:
        exists = path.exists()
    except OSError as error:  # a folder on the way may not be looked into, a name is too long
        raise InputError(f"cannot be reached ({error.strerror})", str(path), "check the path and its rights") from error
    if exists or not glob.has_magic(str(given)):
        return [path]
    return [Path(found) for found in natsorted(glob.glob(str(given), recursive=True), alg=ns.PATH)]  # noqa: PTH207


def _listed(paths: PathLike | Iterable[PathLike]) -> list[PathLike]:
    return [paths] if isinstance(paths, str | Path) else list(paths)


def expand(paths: PathLike | Iterable[PathLike]) -> list[Path]:
    """Return the recordings that are meant where each is a recording of its own: files and folders.

    A pattern stands for its matches; one folder given alone stands for the files and folders in it.
    """
    listed = _listed(paths)
    found = [match for given in listed for match in _matches(given)]
    if len(found) == 1 and found[0].is_dir():
        entries = [entry for entry in found[0].iterdir() if entry.is_dir() or not _is_aside(entry)]
        found = natsorted([entry for entry in entries if not entry.name.startswith(".")], alg=ns.PATH)
    if not found:
        raise InputError("no file matches", ", ".join(str(path) for path in listed), "check the path or pattern")
    return found


def find_files(paths: PathLike | Iterable[PathLike]) -> tuple[list[FoundFile], list[str]]:
    """Return the files that are meant, in natural order, and what was passed over in folders.

    Files named one by one are always taken; in folders, hidden files and what is clearly no recording (texts about it,
    pictures, recipes, tables of metadata named like them) are passed over and said so.

    Raises
    ------
    InputError
        Where a path does not exist, a pattern matches nothing, or a folder holds no files.
    """
    listed = _listed(paths)
    if not listed:
        raise InputError("no files were given", "", "name files or a folder")
    found: list[FoundFile] = []
    passed: list[str] = []
    for given in listed:
        matches = _matches(given)
        if not matches:
            raise InputError("no file matches", str(given), "check the pattern")
        for match in matches:
            if match.is_dir():
                _in_folder(match, found, passed)
            elif match.exists() or match.is_symlink():
                _one(match, str(given) != str(match), found, passed)
            else:
                raise InputError("does not exist", str(match), _suggestion(match))
    folders: dict[Path, str] = {}
    unique = list({_real(file.path, folders): file for file in reversed(found)}.values())[::-1]
    if not unique:
        raise InputError(
            "holds no recordings", ", ".join(str(given) for given in listed), "give files or another folder"
        )
    return unique, passed


def _real(path: Path, folders: dict[Path, str]) -> str:
    """Return where a file really lies; each folder is followed once."""
    if path.is_symlink():
        return str(path.resolve())
    folder = path.parent
    if folder not in folders:
        folders[folder] = str(folder.resolve())
    return os.path.join(folders[folder], path.name)  # noqa: PTH118  no path object a file


def _one(match: Path, from_pattern: bool, found: list[FoundFile], passed: list[str]) -> None:
    if from_pattern and _is_aside(match):
        passed.append(printable(match.name))
    elif match.exists() and not match.is_file():
        raise InputError("is no regular file", str(match), "give files or a folder")
    else:
        found.append(FoundFile(match, printable(match.name)))


def _in_folder(folder: Path, found: list[FoundFile], passed: list[str]) -> None:
    try:
        entries = [Path(entry.path) for entry in os.scandir(folder) if entry.is_file(follow_symlinks=True)]
    except OSError as error:
        raise InputError(f"cannot be listed ({error.strerror})", str(folder), "check its permissions") from error
    for path in natsorted(entries, key=lambda entry: entry.name, alg=ns.PATH):
        if path.name.startswith("."):
            continue
        if _is_aside(path):
            passed.append(printable(path.name))
        else:
            found.append(FoundFile(path, printable(path.name)))


def _is_aside(path: Path) -> bool:
    stem = path.name.split(".")[0].lower()
    ending = path.suffix.lower()
    return path.name.startswith(".") or stem in _ASIDE or ending in _ASIDE_ENDINGS or path.name.endswith("~")


def _suggestion(path: Path) -> str:
    import difflib

    parent = path.parent
    names: Sequence[str] = [entry.name for entry in parent.iterdir()] if parent.is_dir() else []
    close = difflib.get_close_matches(path.name, names, n=1, cutoff=0.6)
    return f"did you mean {close[0]}?" if close else "check the path"
