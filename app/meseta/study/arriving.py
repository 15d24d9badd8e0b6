"""Files as they arrive in folders: which are meant, which are whole, which still wait and why.

A look lists the folders and asks for nothing but sizes and times of change; only a file that came to rest is opened.
Time is counted in looks.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Final

from meseta.errors import InputError
from meseta.intake import find_files
from meseta.intake.files import FoundFile
from meseta.study.seen import Look, look_at, look_of
from meseta.study.unfinished import DOUBTFUL_LOOKS, REST_LOOKS, why_unfinished

__all__ = ["Arrivals", "Waiting", "files_meant", "folders_of"]

_SIDECARS: Final = (".json", ".toml", ".ini", ".cfg", ".yaml", ".yml")


def folders_of(named: Sequence[str | Path]) -> list[Path]:
    """Return the folders that the user points to by naming files."""
    folders = [Path(given) if Path(given).is_dir() else Path(given).parent for given in named]
    return list(dict.fromkeys(folders))


def files_meant(named: Iterable[str | Path], study: Path) -> list[FoundFile]:
    """Return the files that are meant, without the study itself and what lies beside it.

    A folder without recordings yet gives nothing.

    Raises
    ------
    InputError
        Where what was named is not there, or cannot be listed.
    """
    found = {file.path: file for given in named for file in _found(given)}
    home = study.resolve()
    folders = {folder: folder.resolve() for folder in {path.parent for path in found}}
    return [
        file
        for path, file in found.items()
        if folders[path.parent] != home.parent or not path.name.startswith((home.name, f".{home.name}"))
    ]


def _found(given: str | Path) -> list[FoundFile]:
    try:
        return find_files([given])[0]
    except InputError as error:
        if Path(given).is_dir() and error.what == "holds no recordings":
            return []
        raise


@dataclass(frozen=True)
class Waiting:
    """A file that is not taken in yet, and why."""

    file: FoundFile
    why: str


@dataclass
class _Rest:
    look: tuple[Look | None, ...]
    quiet: int = 0
    longest: int = 0
    done: bool = False


@dataclass
class Arrivals:
    """What was seen of files from look to look.

    Attributes
    ----------
    waiting : list of Waiting
        Files that the last look found not whole.
    known : list of str
        Names of files that the last look found for the first time, and known already.
    late : list of FoundFile
        Files beside which the last look found other metadata than when they were taken in.
    """

    _rests: dict[Path, _Rest] = field(default_factory=dict)
    _looks: dict[str, Look] = field(default_factory=dict)
    _settled: bool = False
    _listed: frozenset[str] = frozenset()
    _files: list[FoundFile] = field(default_factory=list)
    _beside: dict[str, tuple[Look, ...]] = field(default_factory=dict)
    _folders: set[str] = field(default_factory=set)
    waiting: list[Waiting] = field(default_factory=list)
    known: list[str] = field(default_factory=list)
    late: list[FoundFile] = field(default_factory=list)

    def look(
        self,
        named: Sequence[str | Path],
        study: Path,
        table: frozenset[str] | None,
        knows: Callable[[Path, Look], bool],
    ) -> list[FoundFile]:
        """Look once; return the files that are whole and were not taken in yet.

        Parameters
        ----------
        named : sequence of str or Path
        study : Path
            The study that they go into.
        table : frozenset of str or None
            File names in the table of metadata, where there is one.
        knows : callable
            Says of a file whether it was read before and still looks like that.

        Raises
        ------
        InputError
            Where what was named is not there.
        """
        looks = _listing(named)
        self.known, self.late = [], []
        if looks and looks == self._looks and not self.waiting and self._settled:
            return []
        self._looks, self._settled = looks, False
        if frozenset(looks) != self._listed or not looks or not all(Path(one).is_dir() for one in named):
            self._files, self._listed = files_meant(named, study), frozenset(looks)
        self._beside = _sidecars_of(looks)
        self._folders = {os.path.dirname(stem) for stem in self._beside}  # noqa: PTH120  no path object a file
        self.waiting = []
        for path in self._rests.keys() - {file.path for file in self._files}:
            del self._rests[path]
        ready = []
        for file in self._files:
            key = str(file.path)
            now = looks[key] if key in looks else look_at(file.path)
            if now is None:
                continue  # it was moved away since the folder was listed
            why = self._why_waits(file, now, table, knows)
            if why:
                self.waiting.append(Waiting(file, why))
            elif not self._rests[file.path].done:
                ready.append(file)
        self._settled = not ready and all(Path(one).is_dir() for one in named)
        return ready

    def done(self, files: Iterable[FoundFile]) -> None:
        """Forget files until they change: they were taken in, or cannot be."""
        for file in files:
            if file.path in self._rests:
                self._rests[file.path].done = True

    def again(self, paths: Iterable[Path]) -> None:
        """Look at files again that could not be taken in, though they have not changed."""
        for path in paths:
            if path in self._rests:
                self._rests[path].done, self._settled = False, False

    def _why_waits(
        self, file: FoundFile, now: Look, table: frozenset[str] | None, knows: Callable[[Path, Look], bool]
    ) -> str:
        look = (now, *self._beside.get(_stem(str(file.path)), ()), *self._beside.get(str(file.path), ()))
        rest = self._rests.get(file.path)
        if rest is None:
            known = knows(file.path, now)
            self._rests[file.path] = _Rest(look, done=known)
            self.known += [file.name] if known else []
            return "" if known else "new"
        if rest.look != look:
            grew = rest.look[0] != now
            pause = max(rest.longest, rest.quiet) if grew else rest.longest
            if rest.done and not grew:
                rest.look = look
                self.late.append(file)
                return ""
            self._rests[file.path] = _Rest(look, 0, pause)
            return "still changing"
        if rest.done:
            return ""
        rest.quiet += 1
        if rest.quiet < max(REST_LOOKS, 2 * rest.longest + 1):
            return "still changing" if rest.longest < REST_LOOKS else "it was written with pauses so far"
        return self._why_doubted(file, rest, table)

    def _why_doubted(self, file: FoundFile, rest: _Rest, table: frozenset[str] | None) -> str:
        why, looks = why_unfinished(file.path)
        if looks is None:
            rest.quiet = 0  # a pause of a program that holds the file says nothing of what comes once it is closed
            return why
        if rest.quiet < looks:
            return why
        if rest.quiet < DOUBTFUL_LOOKS:
            alone = _stem(str(file.path)) not in self._beside and str(file.path) not in self._beside
            if alone and str(file.path.parent) in self._folders:
                return "others have a file of metadata beside them, it has none yet"
            if table is not None and not table & {file.name, file.path.name, file.path.stem}:
                return "it is not in the table of metadata yet"
        return ""


def _listing(named: Sequence[str | Path]) -> dict[str, Look]:
    """Return the looks of all files in folders."""
    found: dict[str, Look] = {}
    left = [str(given) for given in named if Path(given).is_dir()]
    while left:
        try:
            with os.scandir(left.pop()) as entries:
                for entry in entries:
                    if entry.is_dir(follow_symlinks=False):
                        if not entry.name.startswith("."):
                            left.append(entry.path)
                    elif entry.is_file():
                        found[entry.path] = look_of(entry.stat())
        except OSError:
            continue  # it was moved away meanwhile; what is there now is seen at the next look
    return found


def _sidecars_of(looks: Mapping[str, Look]) -> dict[str, tuple[Look, ...]]:
    """Return the looks of files of metadata, by the path of the recording without or with its ending."""
    found: dict[str, tuple[Look, ...]] = {}
    names = {_stem(path) for path in looks if not path.endswith(_SIDECARS)} | looks.keys()
    for path, look in looks.items():
        if path.endswith(_SIDECARS) and _stem(path) in names:
            found[_stem(path)] = (*found.get(_stem(path), ()), look)
    return found


def _stem(path: str) -> str:
    return os.path.splitext(path)[0]  # noqa: PTH122  no path object a file
