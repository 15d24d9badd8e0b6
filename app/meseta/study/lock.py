"""Who holds a study: a lock file with a name in it, and the operating system's lock on that file.

The system's lock ends with the process that holds it, however it ends, so a lock file left behind by a killed process
is recognised as stale.  Where the holder is another machine (a network drive), the system's lock may not reach; then
the name in the file decides, until the user says that it is stale.
"""

from __future__ import annotations

import contextlib
import getpass
import json
import os
import socket
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from pathlib import Path

__all__ = ["Holder", "Lock", "lock_of"]


def lock_of(path: Path) -> Path:
    """Return where the lock file of a study lies."""
    return path.with_name(path.name + ".lock")


@dataclass(frozen=True)
class Holder:
    """Who holds a study."""

    user: str
    host: str
    process: int
    since: str

    @classmethod
    def this(cls) -> Holder:
        """Return this process."""
        try:
            user = getpass.getuser()
        except (KeyError, OSError, ImportError):  # no name for this user id
            user = "unknown user"
        return cls(user, socket.gethostname(), os.getpid(), datetime.now(UTC).isoformat(timespec="seconds"))

    def __str__(self) -> str:
        return f"{self.user} on {self.host} (process {self.process}, since {self.since})"


class Lock:
    """The lock of one study, held until :meth:`release`.

    Attributes
    ----------
    holder : Holder or None
        Who else holds the study; None where this process does.
    """

    def __init__(self, path: Path, take_over: bool = False) -> None:
        self.path = lock_of(path)
        self.holder: Holder | None = None
        self._handle = -1
        while self._handle < 0 and self.holder is None:
            self._try(take_over)

    @property
    def held(self) -> bool:
        """Whether this process holds the study."""
        return self._handle >= 0

    def _try(self, take_over: bool) -> None:
        """Take the lock, or learn who holds it; leaves both open where the file was removed meanwhile."""
        handle = os.open(self.path, os.O_RDWR | os.O_CREAT, 0o644)
        outcome = _system_lock(handle)
        written = _read_holder(self.path)
        elsewhere = written is not None and (written.host != socket.gethostname() or outcome == "unknown")
        if outcome == "busy" or (elsewhere and not take_over and not (outcome == "unknown" and _gone(written))):
            self.holder = written or Holder("another user", "unknown host", 0, "unknown")
            os.close(handle)
            return
        if not _same_file(handle, self.path):
            os.close(handle)
            return
        os.ftruncate(handle, 0)
        os.write(handle, json.dumps(asdict(Holder.this())).encode())
        os.fsync(handle)
        self._handle = handle

    def release(self) -> None:
        """Give the study free."""
        if self._handle < 0:
            return
        handle, self._handle = self._handle, -1
        with contextlib.suppress(OSError):
            os.ftruncate(handle, 0)
        if os.name == "nt":
            os.close(handle)
        with contextlib.suppress(OSError):
            self.path.unlink()
        if os.name != "nt":
            os.close(handle)


def _system_lock(handle: int) -> str:
    """Return "taken", "busy" (another process has it), or "unknown" (this file system knows no locks)."""
    try:
        if os.name == "nt":
            import msvcrt

            os.lseek(handle, 1 << 30, os.SEEK_SET)  # a byte nobody reads, so that the name stays readable
            msvcrt.locking(handle, msvcrt.LK_NBLCK, 1)  # type: ignore[attr-defined]
            os.lseek(handle, 0, os.SEEK_SET)
        else:
            import fcntl

            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except (BlockingIOError, PermissionError):
        return "busy"
    except OSError:
        return "unknown"
    return "taken"


def _read_holder(path: Path) -> Holder | None:
    try:
        return Holder(**json.loads(path.read_text(encoding="utf-8")))
    except (OSError, ValueError, TypeError):
        return None


def _gone(holder: Holder | None) -> bool:
    """Return whether a holder on this machine has ended (only asked where the system knows no locks)."""
    if holder is None or holder.host != socket.gethostname() or os.name == "nt":
        return False
    try:
        os.kill(holder.process, 0)
    except ProcessLookupError:
        return True
    except PermissionError:
        return False
    return False


def _same_file(handle: int, path: Path) -> bool:
    """Return whether the path still names the file that was opened."""
    try:
        there = path.stat()
    except FileNotFoundError:
        return False
    here = os.fstat(handle)
    return (here.st_ino, here.st_dev) == (there.st_ino, there.st_dev)
