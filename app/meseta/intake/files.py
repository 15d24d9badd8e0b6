"""Which files are meant by what the user gave: files, folders, globs; in natural order.

A folder stands for the files in it and in its subfolders.  Passed over, and said so, are hidden files and folders, what
is clearly no recording, studies with what lies beside them, folders of earlier results, and links to folders.
"""

from __future__ import annotations

import glob
import os
from collections.abc import Iterable, Iterator, Sequence, Set
from dataclasses import dataclass, field
from functools import lru_cache
from pathlib import Path
from typing import Final

from natsort import natsorted, ns

from meseta.errors import InputError, printable

__all__ = ["SIDECAR_ENDINGS", "STUDY_MARK", "FoundFile", "expand", "find_files"]

SIDECAR_ENDINGS: Final = (".json", ".toml", ".ini", ".cfg", ".yaml", ".yml")
"""Of files of metadata that lie beside recordings."""
STUDY_MARK: Final = b"meseta study"
"""Stands in the first bytes of every study file."""
_HEAD_BYTE: Final = 4096
_STUDY_ENDINGS: Final = (".h5", ".hdf5", ".hdf")
_RESULT: Final = frozenset({"summary.json", "recipe.toml"})
"""Files that tell a folder which an analysis filled."""

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

    A pattern stands for its matches; one folder given alone stands for the files and folders in it that are not passed
    over.
    """
    listed = _listed(paths)
    found = [match for given in listed for match in _matches(given)]
    if len(found) == 1 and found[0].is_dir():
        inside = _inside(found[0])
        folders = [folder for folder in inside.folders if not _is_result(folder)]
        found = natsorted([*inside.files, *folders], alg=ns.PATH)
    if not found:
        raise InputError("no file matches", ", ".join(str(path) for path in listed), "check the path or pattern")
    return found


def find_files(paths: PathLike | Iterable[PathLike]) -> tuple[list[FoundFile], list[str]]:
    """Return the files that are meant, in natural order, and what was passed over in folders.

    Files named one by one are always taken; in folders and their subfolders what is clearly no recording (texts about
    it, pictures, recipes, tables of metadata named like them), hidden files, studies and earlier results are passed
    over.

    Returns
    -------
    (list of FoundFile, list of str)
        Names are relative to the folder given: a folder's own files first, then those of its subfolders, one subfolder
        after the other.  What was passed over stands by name, with why where the name does not tell.

    Raises
    ------
    InputError
        Where a path does not exist, a pattern matches nothing, or a folder holds no recordings.
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
    of_recordings = {name for file in unique for name in (file.name, file.name.rpartition(".")[0])}
    return unique, [name for name in passed if not _is_sidecar(name, of_recordings)]


def _is_sidecar(name: str, of_recordings: Set[str]) -> bool:
    """Return whether a file is the metadata of a recording beside it, which is read with it."""
    stem, _, ending = name.rpartition(".")
    return f".{ending}" in SIDECAR_ENDINGS and stem in of_recordings


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
    """Walk through a folder and its subfolders."""
    if _is_result(folder):
        raise InputError("is an earlier result, no recordings", str(folder), "give its study.h5, or the recordings")
    for inside in _walked(folder):
        before = inside.folder.relative_to(folder).as_posix()
        home = "" if before == "." else f"{before}/"
        passed += [printable(home + name) for name in inside.passed]
        found += [FoundFile(path, printable(home + path.name)) for path in inside.files]


@dataclass(frozen=True)
class _Inside:
    """What lies directly in a folder, each in natural order."""

    folder: Path
    files: list[Path] = field(default_factory=list)
    folders: list[Path] = field(default_factory=list)
    passed: list[str] = field(default_factory=list)


def _walked(folder: Path) -> Iterator[_Inside]:
    """Yield a folder and its subfolders, without those that are passed over."""
    inside = _inside(folder)
    results = [below for below in inside.folders if _is_result(below)]
    inside.passed.extend(f"{below.name} (an earlier result)" for below in results)
    yield inside
    for below in inside.folders:
        if below not in results:
            try:
                yield from _walked(below)
            except InputError as error:  # the others are taken in all the same
                yield _Inside(folder, passed=[f"{below.name} ({error.what})"])


def _inside(folder: Path) -> _Inside:
    try:
        with os.scandir(folder) as entries:
            listed = natsorted(entries, key=lambda entry: entry.name, alg=ns.PATH)
    except OSError as error:
        raise InputError(f"cannot be listed ({error.strerror})", str(folder), "check its permissions") from error
    inside = _Inside(folder)
    studies = tuple(one.name for one in listed if one.name.lower().endswith(_STUDY_ENDINGS) and _is_study(one))
    for entry in listed:
        path = Path(entry.path)
        if entry.name.startswith("."):
            inside.passed.append(f"{entry.name} (hidden)")
        elif entry.is_dir(follow_symlinks=False):
            inside.folders.append(path)
        elif entry.is_dir():
            inside.passed.append(f"{entry.name} (a link to a folder)")
        elif not entry.is_file() or _is_aside(path):
            inside.passed.append(entry.name)
        elif studies and entry.name.startswith(studies):
            inside.passed.append(f"{entry.name} ({'a study' if entry.name in studies else 'belongs to a study'})")
        else:
            inside.files.append(path)
    return inside


def _is_result(folder: Path) -> bool:
    return all(os.path.exists(folder / name) for name in _RESULT)  # noqa: PTH110  False where it may not be looked into


def _is_study(entry: os.DirEntry[str]) -> bool:
    try:
        there = entry.stat()
    except OSError:
        return False
    return entry.is_file() and _is_study_file(entry.path, there.st_size, there.st_mtime_ns)


@lru_cache(maxsize=65_536)
def _is_study_file(path: str, _size_byte: int, _modified_ns: int) -> bool:
    """Return whether a file begins like a study; asked again only once it has changed."""
    try:
        with Path(path).open("rb") as file:
            return STUDY_MARK in file.read(_HEAD_BYTE)
    except OSError:
        return False


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
