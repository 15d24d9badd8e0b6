"""Making, opening and changing study files as a whole; what stands in their root."""

from __future__ import annotations

import contextlib
import glob
import os
import uuid
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import Final

import h5py

from meseta import __version__
from meseta.errors import OutputError, StudyError
from meseta.intake.files import STUDY_MARK
from meseta.study.columns import write_attribute
from meseta.study.migration import migrate
from meseta.study.pages import PagedFile, log_of, room_remedy, sync_folder, whole_log
from meseta.study.strict import read_attribute, reading

__all__ = [
    "FORMAT",
    "SCHEMA",
    "changing",
    "clear_unfinished",
    "is_study",
    "looking",
    "making",
    "rewritten_of",
    "swap",
    "upgrade",
]

FORMAT: Final = STUDY_MARK.decode()
SCHEMA: Final = 2
_LIBRARY: Final = ("v110", "v110")  # metadata with checksums, readable by HDF5 1.10 and later
_SIGNATURE: Final = b"\x89HDF\r\n\x1a\n"


def is_study(path: str | Path) -> bool:
    """Return whether a file is a study of any version, whole or not."""
    try:
        with Path(path).open("rb") as file:
            head = file.read(4096)
    except OSError:
        return False
    if not head.startswith(_SIGNATURE):
        return False
    return FORMAT.encode() in head or _is_marked(Path(path))


def _is_marked(path: Path) -> bool:
    try:
        with h5py.File(path, "r", locking=False) as root:
            return str(read_attribute(root, "format")) == FORMAT
    except (OSError, RuntimeError, ValueError, KeyError):
        return False


@contextmanager
def making(path: Path, identity: str = "") -> Iterator[h5py.File]:
    """Give an empty study under a temporary name, which takes the name ``path`` if the block succeeds.

    Raises
    ------
    OutputError
        Where no file can be made there.
    StudyError
        Where there is no room.
    """
    partial = path.with_name(f".{path.name}-{os.getpid()}-unfinished")
    try:
        partial.touch()
    except OSError as error:
        raise OutputError(f"cannot be made ({error.strerror})", str(path), "choose another place") from error
    try:
        with PagedFile(partial, writable=True, fresh=True) as paged:
            with _hdf5(paged, "w") as root:
                write_attribute(root, "format", FORMAT)
                write_attribute(root, "schema", SCHEMA)
                write_attribute(root, "id", identity or uuid.uuid4().hex)
                write_attribute(root, "made", datetime.now(UTC).isoformat(timespec="seconds"))
                write_attribute(root, "written_by", __version__)
                yield root
            paged.commit()
        partial.replace(path)
        sync_folder(path.parent)
    except OSError as error:
        raise StudyError(f"cannot be written ({error.strerror})", str(path), room_remedy(error)) from error
    finally:
        partial.unlink(missing_ok=True)


@contextmanager
def changing(path: Path) -> Iterator[h5py.File]:
    """Give the study for changes that take effect all at once if the block succeeds, else not at all."""
    _heal(path)
    try:
        with PagedFile(path, writable=True) as paged:
            with _hdf5(paged, "r+") as root:
                write_attribute(root, "written_by", __version__)
                yield root
            paged.commit()
    except OSError as error:
        raise StudyError(f"cannot be written ({error.strerror})", str(path), room_remedy(error)) from error


@contextmanager
def looking(path: Path) -> Iterator[h5py.File]:
    """Give the study for reading, as the last finished save left it, in the present schema.

    A save that another process is just finishing is seen as finished; an older schema is migrated in memory.
    """
    with PagedFile(path, writable=False) as paged:
        log = whole_log(path)
        if log is not None:
            paged.apply(log)
        schema = _schema(paged)
        if schema < SCHEMA:
            with _hdf5(paged, "r+") as root:
                migrate(root, schema, SCHEMA)
        root = reading("the table of contents", str(path), lambda: h5py.File(paged, "r"))
        with root:
            yield root


def upgrade(path: Path) -> Path | None:
    """Migrate a study of an older schema in its file; return where the copy of the old one is, None if not needed."""
    _heal(path)
    with PagedFile(path, writable=False) as paged:
        schema = _schema(paged)
    if schema == SCHEMA:
        return None
    backup = _backup(path, schema)
    with changing(path) as root:
        migrate(root, schema, SCHEMA)
    return backup


def rewritten_of(path: Path) -> Path:
    """Return where a study that is written anew lies before it takes the place of the old one."""
    return path.with_name(f".{path.name}-rewritten")


def swap(beside: Path, path: Path) -> None:
    """Put a finished file in the place of another one."""
    try:
        beside.replace(path)
    except OSError as error:
        beside.unlink(missing_ok=True)
        raise StudyError(f"cannot be replaced ({error.strerror})", str(path), "close it elsewhere") from error
    sync_folder(path.parent)


def clear_unfinished(path: Path) -> None:
    """Remove what killed processes left half written; only the holder of the lock may."""
    rewritten = rewritten_of(path).name
    for pattern in (f".{path.name}-*unfinished", f".{rewritten}-*unfinished", rewritten):
        for left in path.parent.glob(glob.escape(pattern).replace("[*]", "*")):
            left.unlink(missing_ok=True)


def _backup(path: Path, schema: int) -> Path:
    import shutil

    backup = path.with_name(f"{path.stem}-schema{schema}-backup{path.suffix}")
    partial = backup.with_name(f".{backup.name}-unfinished")
    try:
        shutil.copyfile(path, partial)
        with partial.open("r+b") as file:
            os.fsync(file.fileno())
        partial.replace(backup)
    except OSError as error:
        partial.unlink(missing_ok=True)
        raise StudyError(
            f"cannot be copied before its schema is changed ({error.strerror})", str(path), room_remedy(error)
        ) from error
    return backup


def _schema(paged: PagedFile) -> int:
    """Return the schema of a study, refusing what is none and what is newer."""
    where = str(paged.path)

    def look() -> int:
        with h5py.File(paged, "r") as root:
            if str(read_attribute(root, "format")) != FORMAT:
                raise ValueError("not marked as a study")
            return int(read_attribute(root, "schema"))

    schema = reading("the table of contents", where, look)
    if schema > SCHEMA:
        raise StudyError(
            f"was written by a newer Meseta (schema {schema}; this one, {__version__}, knows up to {SCHEMA})",
            where,
            "update Meseta to open it",
        )
    return schema


@contextmanager
def _hdf5(paged: PagedFile, mode: str) -> Iterator[h5py.File]:
    """Give the HDF5 file in a paged one; after a fault its changes are forgotten, so that it can close."""
    where = str(paged.path)
    root = reading("the table of contents", where, lambda: h5py.File(paged, mode, libver=_LIBRARY))
    try:
        yield root
        root.flush()
        paged.check()
    except BaseException:
        paged.abandon()
        with contextlib.suppress(Exception):  # HDF5 may find nonsense in what was forgotten; nothing of it is kept
            root.close()
        raise
    root.close()
    paged.check()


def _heal(path: Path) -> None:
    """Finish a save whose log is whole; remove the log of one that never was."""
    log = whole_log(path)
    if log is not None:
        with PagedFile(path, writable=True) as paged:
            paged.apply(log)
    elif log_of(path).exists():
        log_of(path).unlink()
        sync_folder(path.parent)
