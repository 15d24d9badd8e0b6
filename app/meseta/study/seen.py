"""Which files a study was shown: so a known file is never read again, and one with another content is noticed.

Kept in the study file itself (group ``/seen``) and written in the same commit as the recordings, so that it is true
whenever a process ends.  Where a file lies is kept as a digest: a study that is handed on tells nobody's folders.
"""

from __future__ import annotations

import hashlib
import os
import stat
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final, NamedTuple

import h5py
import numpy as np

from meseta.errors import MesetaError
from meseta.study.columns import write_array
from meseta.study.files import looking
from meseta.study.strict import group, read_array, reading

__all__ = ["Look", "Seen", "look_at", "look_of", "read_seen", "seen_of"]

_CHUNK: Final = 4096
_COLUMNS: Final = {"place": "S32", "sha256": "S64", "size_byte": "i8", "modified_ns": "i8"}


class Look(NamedTuple):
    """What tells without reading whether a file is still the same."""

    size_byte: int
    modified_ns: int


def look_of(found: os.stat_result) -> Look:
    """Return the look of a file whose status is at hand."""
    return Look(found.st_size, found.st_mtime_ns)


def look_at(path: Path) -> Look | None:
    """Return size and time of change of a regular file, None where there is none."""
    try:
        found = path.stat()
    except OSError:
        return None
    return look_of(found) if stat.S_ISREG(found.st_mode) else None


@dataclass(frozen=True)
class _Known:
    look: Look
    sha256: str


class Seen:
    """Files by where they lie, each with its last look and checksum; :meth:`write` adds what is new to a study."""

    def __init__(self, known: Iterable[tuple[str, Look, str]] = (), *, fresh: bool = False) -> None:
        self._known = {place: _Known(look, sha256) for place, look, sha256 in known}
        self._new: list[str] = list(self._known) if fresh else []

    def copy(self, *, fresh: bool = False) -> Seen:
        """Return a copy; a fresh one counts all its files as not written yet."""
        made = Seen()
        made._known, made._new = dict(self._known), list(self._known) if fresh else list(self._new)
        return made

    @property
    def unwritten(self) -> bool:
        """Whether there is something that the study file does not hold yet."""
        return bool(self._new)

    def checksum(self, path: Path, look: Look | None = None) -> str:
        """Return the checksum that a file had; with a look, only where it still looks like that; else nothing."""
        known = self._known.get(_place(path))
        return known.sha256 if known is not None and look in (None, known.look) else ""

    def remember(self, path: Path, look: Look, sha256: str) -> None:
        """Keep what a file looks like that was read."""
        place = _place(path)
        if self._known.get(place) != _Known(look, sha256):
            self._known[place] = _Known(look, sha256)
            self._new.append(place)

    def write(self, root: h5py.Group) -> None:
        """Append what is new; the last row of a file counts."""
        if not self._new:
            return
        rows = [(place, self._known[place]) for place in dict.fromkeys(self._new)]
        columns = {
            "place": [place for place, _ in rows],
            "sha256": [one.sha256 for _, one in rows],
            "size_byte": [one.look.size_byte for _, one in rows],
            "modified_ns": [one.look.modified_ns for _, one in rows],
        }
        home = group(root, "seen") if "seen" in root else root.create_group("seen")
        for name, kind in _COLUMNS.items():
            _append(home, name, np.array(columns[name], kind))
        self._new = []


def _append(home: h5py.Group, name: str, values: np.ndarray[Any, Any]) -> None:
    if name not in home:
        write_array(home, name, np.char.decode(values) if values.dtype.kind == "S" else values, chunk=_CHUNK)
        return
    before = home[name].shape[0]
    home[name].resize((before + len(values),))
    home[name][before:] = values.astype(home[name].dtype)


def _place(path: Path) -> str:
    return hashlib.blake2b(os.fsencode(path.absolute()), digest_size=16).hexdigest()


def seen_of(root: h5py.Group) -> Seen:
    """Return what an open study file holds; nothing where it is from before this was kept, or damaged."""
    if "seen" not in root:
        return Seen()

    def rows() -> Seen:
        home = group(root, "seen")
        place, sha256, size, modified = (read_array(home, name).tolist() for name in _COLUMNS)
        looks = [Look(*one) for one in zip(size, modified, strict=True)]
        return Seen(zip(place, looks, sha256, strict=True))

    try:
        return reading("the list of files", str(root.file.filename), rows)
    except MesetaError:
        return Seen()  # then files are read once more, and recognised by their checksums


def read_seen(path: Path) -> Seen:
    """Return what a study file holds."""
    with looking(path) as root:
        return seen_of(root)
