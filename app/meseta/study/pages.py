"""A file whose changes take effect all at once, for HDF5 to write through.

Bytes behind the end of what was last committed are written at once: nothing committed refers to them.  Changes of
committed bytes are kept as pages in memory until :meth:`PagedFile.commit` writes them, with checksums, to a *redo log*
beside the file, makes the log durable, applies it, and removes it.  Whatever happens in between, the file is either as
it was or, after the log is applied again, as it was to become.
"""

from __future__ import annotations

import contextlib
import io
import os
import struct
import zlib
from pathlib import Path
from types import TracebackType
from typing import BinaryIO, Final, Self

from meseta.errors import StudyError

__all__ = ["PAGE", "PagedFile", "log_of", "room_remedy", "sync_folder", "whole_log"]

PAGE: Final = 4096
_MAGIC: Final = b"meseta redo 1\n"
_HEAD: Final = struct.Struct("<QQQII")  # size before, size after, pages, checksum of the first bytes before and after
_FIRST: Final = 512


def log_of(path: Path) -> Path:
    """Return where the redo log of a study lies."""
    return path.with_name(path.name + ".redo")


def sync_folder(folder: Path) -> None:
    """Make names in a folder durable, where the system can."""
    if os.name == "nt":
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        with contextlib.suppress(OSError):  # some network file systems refuse; the file itself was synced
            os.fsync(handle)
    finally:
        os.close(handle)


class Log:
    """A redo log read back: sizes and changed pages."""

    def __init__(self, before: int, after: int, first: tuple[int, int], pages: dict[int, bytes]) -> None:
        self.before, self.after, self.first, self.pages = before, after, first, pages

    def text(self) -> bytes:
        """Return the log as it is written."""
        parts = [_MAGIC, _HEAD.pack(self.before, self.after, len(self.pages), *self.first)]
        for number, page in sorted(self.pages.items()):
            parts.append(struct.pack("<Q", number) + page)
        body = b"".join(parts)
        return body + struct.pack("<I", zlib.crc32(body))

    @classmethod
    def parse(cls, body: bytes) -> Log | None:
        """Return the log in ``body``; None where it is not whole (its commit was never reported)."""
        if len(body) < len(_MAGIC) + _HEAD.size + 4 or not body.startswith(_MAGIC):
            return None
        if zlib.crc32(body[:-4]) != struct.unpack("<I", body[-4:])[0]:
            return None
        before, after, count, *first = _HEAD.unpack_from(body, len(_MAGIC))
        place, pages = len(_MAGIC) + _HEAD.size, {}
        for _ in range(count):
            (number,) = struct.unpack_from("<Q", body, place)
            pages[number] = body[place + 8 : place + 8 + PAGE]
            place += 8 + PAGE
        return cls(before, after, (first[0], first[1]), pages)

    def fits(self, head: bytes, size: int) -> bool:
        """Return whether the log belongs to a file with these first bytes and this size."""
        return zlib.crc32(head[:_FIRST]) in self.first and size >= self.after


def whole_log(path: Path) -> Log | None:
    """Return the whole redo log that belongs to a study, or None."""
    try:
        log = Log.parse(log_of(path).read_bytes())
    except FileNotFoundError:
        return None
    if log is None:
        return None
    with path.open("rb") as file:
        head = file.read(_FIRST)
        size = file.seek(0, io.SEEK_END)
    return log if log.fits(head, size) else None


class PagedFile:
    """A file object for :class:`h5py.File` (driver ``fileobj``) with all-or-nothing changes.

    Parameters
    ----------
    path : Path
        The file; must exist.
    writable : bool
        Without it changes stay in memory and are forgotten (a migration of a read-only study, say).
    fresh : bool
        The file is new and under a temporary name: everything is written at once.
    """

    def __init__(self, path: Path, *, writable: bool, fresh: bool = False) -> None:
        self.path, self.writable = path, writable
        self._file: BinaryIO = path.open("r+b" if writable else "rb", buffering=0)
        self._committed = 0 if fresh else self._file.seek(0, io.SEEK_END)
        self._size, self._at = self._committed, 0
        self._pages: dict[int, bytearray] = {}
        self._memory_tail = bytearray()
        self._discarding = False
        self.fault: OSError | None = None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    # -- what HDF5 calls ------------------------------------------------------------------------------------------

    def seek(self, offset: int, whence: int = io.SEEK_SET) -> int:
        """Move to a byte."""
        base = {io.SEEK_SET: 0, io.SEEK_CUR: self._at, io.SEEK_END: self._size}[whence]
        self._at = base + offset
        return self._at

    def tell(self) -> int:
        """Return the present byte."""
        return self._at

    def read(self, count: int) -> bytes:
        """Return ``count`` bytes from the present one on."""
        buffer = bytearray(count)
        self.readinto(memoryview(buffer))
        return bytes(buffer)

    def readinto(self, buffer: memoryview) -> int:
        """Fill ``buffer`` from the file as changed so far; bytes behind its end are zero."""
        view = memoryview(buffer).cast("B")
        start, count = self._at, len(view)
        self._read_file(start, view)
        self._patch(start, view)
        self._at = start + count
        return count

    def write(self, data: bytes | memoryview) -> int:
        """Write at the present byte: kept as pages below the committed end, at once behind it."""
        view = memoryview(data).cast("B")
        start, count = self._at, len(view)
        split = min(max(self._committed - start, 0), count)
        if not self._discarding:
            if split:
                self._keep(start, view[:split])
            if split < count:
                self._append(start + split, view[split:])
        self._at = start + count
        self._size = max(self._size, self._at)
        return count

    def truncate(self, size: int | None = None) -> int:
        """Set the size; takes effect with the commit."""
        self._size = self._at if size is None else size
        return self._size

    def flush(self) -> None:
        """Do nothing: changes take effect with the commit."""

    # -- all or nothing -----------------------------------------------------------------------------------------

    def check(self) -> None:
        """Raise the fault of an earlier write, if there was one (HDF5 is never told, or it could not close)."""
        if self.fault is not None:
            raise StudyError(f"cannot be written ({self.fault.strerror})", str(self.path), room_remedy(self.fault))

    def commit(self) -> None:
        """Make all changes take effect and durable.

        Raises
        ------
        StudyError
            Where there is no room; the file is then as it was.  Where the log is durable but could not be applied: the
            changes have happened, and the next opening applies it.
        """
        self.check()
        log: Log | None = None
        try:
            self._file.truncate(max(self._size, self._committed))
            os.fsync(self._file.fileno())
            if self._pages:
                log = self._log()
                self._write_log(log)
        except OSError as error:
            self.fault = error
            self.abandon()
            self.check()
        self._committed = self._size  # from here on nothing may be taken back
        self._pages.clear()
        try:
            if log is not None:
                self._apply(log)
        except OSError as error:
            self._discarding = True
            raise StudyError(
                f"the changes are kept, but not yet in place ({error.strerror})",
                str(self.path),
                "open the study again to finish",
            ) from error

    def abandon(self) -> None:
        """Forget all changes since the last commit; what HDF5 still writes on closing goes nowhere."""
        self._discarding = True
        self._pages.clear()
        if self.writable:
            with contextlib.suppress(OSError):  # bytes behind the committed end do no harm
                self._file.truncate(self._committed)
        self._size = self._committed

    def close(self) -> None:
        """Let go of the file; what was not committed is forgotten."""
        if not self._file.closed:
            if self.writable and self._size != self._committed:
                self.abandon()
            self._file.close()

    def apply(self, log: Log) -> None:
        """Show the file as a whole log will make it; written at once where the file is writable."""
        if self.writable:
            self._apply(log)
            self._committed = self._size = self._file.seek(0, io.SEEK_END)
        else:
            self._pages.update((number, bytearray(page)) for number, page in log.pages.items())
            self._committed = self._size = log.after

    # -- bytes --------------------------------------------------------------------------------------------------

    def _read_file(self, start: int, view: memoryview) -> None:
        self._file.seek(start)
        filled = 0
        while filled < len(view):
            count = self._file.readinto(view[filled:])  # type: ignore[attr-defined]
            if not count:
                view[filled:] = bytes(len(view) - filled)
                return
            filled += count

    def _patch(self, start: int, view: memoryview) -> None:
        """Lay changed pages, and the part in memory of a read-only file, over what the file has."""
        if self._pages:
            for number in range(start // PAGE, (start + len(view) - 1) // PAGE + 1 if len(view) else 0):
                page = self._pages.get(number)
                if page is not None:
                    _overlay(view, start, number * PAGE, memoryview(page)[: max(self._committed - number * PAGE, 0)])
        if self._memory_tail:
            _overlay(view, start, self._committed, memoryview(self._memory_tail))

    def _keep(self, start: int, view: memoryview) -> None:
        place = start
        while place < start + len(view):
            number, within = divmod(place, PAGE)
            count = min(PAGE - within, start + len(view) - place)
            page = self._pages.get(number)
            if page is None:
                page = bytearray(PAGE)
                if count < PAGE:
                    self._read_file(number * PAGE, memoryview(page))
                self._pages[number] = page
            page[within : within + count] = view[place - start : place - start + count]
            place += count

    def _append(self, start: int, view: memoryview) -> None:
        if not self.writable:
            end = start - self._committed + len(view)
            self._memory_tail.extend(bytes(max(end - len(self._memory_tail), 0)))
            self._memory_tail[start - self._committed : end] = view
            return
        if self.fault is not None:
            return
        try:
            self._file.seek(start)
            written = 0
            while written < len(view):
                written += self._file.write(view[written:])
        except OSError as error:
            self.fault = error

    # -- the log --------------------------------------------------------------------------------------------------

    def _log(self) -> Log:
        before = bytearray(_FIRST)
        self._read_file(0, memoryview(before))
        after = bytearray(before)
        self._patch(0, memoryview(after))
        pages = {number: self._page(number) for number in self._pages}
        return Log(self._committed, self._size, (zlib.crc32(before), zlib.crc32(after)), pages)

    def _page(self, number: int) -> bytes:
        """Return a changed page with what was appended behind the committed end."""
        page = bytearray(PAGE)
        self._read_file(number * PAGE, memoryview(page))
        self._patch(number * PAGE, memoryview(page))
        return bytes(page)

    def _write_log(self, log: Log) -> None:
        path = log_of(self.path)
        try:
            with path.open("wb", buffering=0) as file:
                body = memoryview(log.text())
                while body:
                    body = body[file.write(body) :]
                os.fsync(file.fileno())
            sync_folder(path.parent)
        except OSError:
            with contextlib.suppress(OSError):
                path.unlink()
            raise

    def _apply(self, log: Log) -> None:
        """Write the pages of a whole log; page 0, by which a log is recognised, last."""
        for number in sorted(log.pages, reverse=True):
            data = memoryview(log.pages[number])[: max(log.after - number * PAGE, 0)]
            self._file.seek(number * PAGE)
            while data:
                data = data[self._file.write(data) :]
        self._file.truncate(log.after)
        os.fsync(self._file.fileno())
        log_of(self.path).unlink(missing_ok=True)
        sync_folder(self.path.parent)


def _overlay(view: memoryview, start: int, at: int, data: memoryview) -> None:
    """Copy ``data``, which lies at byte ``at``, into ``view``, which begins at byte ``start``."""
    low, high = max(start, at), min(start + len(view), at + len(data))
    if low < high:
        view[low - start : high - start] = data[low - at : high - at]


def room_remedy(error: OSError) -> str:
    """Return what to do about a fault of writing."""
    import errno

    full = error.errno in (errno.ENOSPC, errno.EFBIG, errno.EDQUOT)
    return "free some room on the disk; the last saved state is whole" if full else "check the disk"
