"""The journal: every entry of the history, at once and durable, beside the study, until the study is saved.

JSON lines, each with a checksum in front.  The first line names the study, so that a journal never reaches another
one.  A line that was cut short was never reported as kept; a damaged line is named and ends what can be replayed.
"""

from __future__ import annotations

import contextlib
import json
import os
import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from meseta.errors import StudyError
from meseta.study.history import Entry
from meseta.study.pages import room_remedy, sync_folder

__all__ = ["Journal", "JournalContent", "journal_of", "read_journal"]


def journal_of(path: Path) -> Path:
    """Return where the journal of a study lies."""
    return path.with_name(path.name + ".journal")


@dataclass(frozen=True)
class JournalContent:
    """What a journal holds.

    Attributes
    ----------
    entries : tuple of Entry
        In order.
    whole_byte : int
        Bytes up to the end of the last whole line.
    damage : str
        What is wrong in the middle of it; empty where nothing is.
    foreign : bool
        Whether it belongs to another study.
    """

    entries: tuple[Entry, ...] = ()
    whole_byte: int = 0
    damage: str = ""
    foreign: bool = False


def read_journal(path: Path, study: str) -> JournalContent:
    """Return what the journal of the study at ``path`` holds."""
    try:
        body = journal_of(path).read_bytes()
    except FileNotFoundError:
        return JournalContent()
    except OSError as error:
        return JournalContent(damage=f"cannot be read ({error.strerror})")
    entries: list[Entry] = []
    place = 0
    for number, line in enumerate(body.split(b"\n")[:-1], 1):
        try:
            plain = _parse(line)
            if number == 1:
                if plain["study"] != study:
                    return JournalContent(foreign=True)
            else:
                entries.append(Entry.parse(plain))
        except (ValueError, KeyError, TypeError):
            return JournalContent(tuple(entries), place, f"line {number} is damaged")
        place += len(line) + 1
    return JournalContent(tuple(entries), place)


def _parse(line: bytes) -> dict[str, Any]:
    checksum, _, text = line.partition(b" ")
    if len(checksum) != 8 or int(checksum, 16) != zlib.crc32(text):
        raise ValueError("checksum")
    plain = json.loads(text)
    if not isinstance(plain, dict):
        raise TypeError("not an entry")
    return plain


def _line(plain: dict[str, Any]) -> bytes:
    text = json.dumps(plain, ensure_ascii=False, separators=(",", ":")).encode()
    return b"%08x %s\n" % (zlib.crc32(text), text)


class Journal:
    """Appends entries durably."""

    def __init__(self, path: Path, study: str) -> None:
        self.path, self.study = journal_of(path), study

    def append(self, entries: Sequence[Entry]) -> None:
        """Write entries and make them durable, all or none.

        Raises
        ------
        StudyError
            Where there is no room; the journal is then as it was.
        """
        try:
            with self.path.open("ab", buffering=0) as file:
                before = file.tell()
                head = b"" if before else _line({"study": self.study})
                body = memoryview(head + b"".join(_line(entry.plain()) for entry in entries))
                try:
                    while body:
                        body = body[file.write(body) :]
                    os.fsync(file.fileno())
                except OSError:
                    with contextlib.suppress(OSError):
                        file.truncate(before)
                    raise
            if not before:
                sync_folder(self.path.parent)
        except OSError as error:
            raise StudyError(
                f"this change could not be kept ({error.strerror})", str(self.path), room_remedy(error)
            ) from error

    def cut(self, whole_byte: int) -> None:
        """Remove a last line that was cut short."""
        with self.path.open("r+b") as file:
            file.truncate(whole_byte)
            os.fsync(file.fileno())

    def clear(self) -> None:
        """Remove the journal: all its entries are saved."""
        with contextlib.suppress(OSError):  # entries that are saved already are skipped when it is read again
            self.path.unlink(missing_ok=True)

    def set_aside(self) -> Path:
        """Rename a journal that cannot be used, so that nothing is lost; return its new name."""
        number = 1
        while (aside := self.path.with_name(f"{self.path.name}-aside-{number}")).exists():
            number += 1
        self.path.replace(aside)
        return aside
