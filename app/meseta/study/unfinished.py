"""What tells that a file is still being written, beside that it grows."""

from __future__ import annotations

import errno
import os
import signal
import sys
from functools import cache
from pathlib import Path
from typing import Final

__all__ = ["DOUBTFUL_LOOKS", "REST_LOOKS", "UNCLOSED_LOOKS", "why_unfinished"]

REST_LOOKS: Final = 2
"""A file counts as whole once it looked the same so many times after the first."""
DOUBTFUL_LOOKS: Final = 30
UNCLOSED_LOOKS: Final = 300
_TAIL_BYTE: Final = 4096
_HDF5: Final = b"\x89HDF\r\n\x1a\n"
_LOCAL: Final = frozenset({"ext2", "ext3", "ext4", "xfs", "tmpfs", "f2fs", "overlay"})
"""File systems that know of every program that writes a file; on a network others may write unseen."""


def why_unfinished(path: Path) -> tuple[str, int | None]:
    """Return in words why a file that rests may still not be whole, and for how many looks it must rest then.

    Returns
    -------
    str
        Nothing where nothing speaks against it.
    int or None
        None: however long it rests.
    """
    if _open_for_writing(path):
        return "another program has it open for writing", None
    try:
        with path.open("rb") as file:
            head = file.read(64)
            size = file.seek(0, os.SEEK_END)
            file.seek(max(size - _TAIL_BYTE, 0))
            tail = file.read(_TAIL_BYTE)
    except OSError:
        return "", REST_LOOKS  # reading it will say what is wrong
    if not size:
        return "it is empty so far", UNCLOSED_LOOKS
    if head.startswith(_HDF5):
        return ("the HDF5 file was not closed", UNCLOSED_LOOKS) if _unclosed(head, size) else ("", REST_LOOKS)
    if not any(tail):
        return "it ends in zeros, as a copy under way does", DOUBTFUL_LOOKS
    return "", REST_LOOKS


def _unclosed(head: bytes, size: int) -> bool:
    """Return whether an HDF5 file says itself that it is open, or ends before the end that it states.

    HDF5 File Format Specification, section II.A: superblocks 2 and 3 begin with signature, version, sizes of offsets
    and lengths, and file consistency flags (bit 0: open for writing, bit 2: for writing by one with readers); base
    address, superblock extension and end of file follow.  In versions 0 and 1 the end of file is the third address
    behind 24 or 28 bytes.
    """
    version, wide = head[8], head[9] if head[8] >= 2 else head[13]
    if wide not in (2, 4, 8):
        return False
    first = 12 if version >= 2 else 24 if version == 0 else 28
    end = int.from_bytes(head[first + 2 * wide : first + 3 * wide], "little")
    return (version >= 3 and bool(head[11] & 0b101)) or size < end


def _open_for_writing(path: Path) -> bool:
    """Return whether any program has a file open for writing, where the system can tell.

    Linux grants a read lease only on a file that nobody has open for writing (fcntl(2), F_SETLEASE); it is given back
    at once.  The signal that a writer coming at that very moment would cause is made one that is ignored.
    """
    if sys.platform != "linux":
        return False
    import fcntl

    try:
        handle = os.open(path, os.O_RDONLY | os.O_NONBLOCK | os.O_CLOEXEC)
    except OSError:
        return False
    try:
        if _file_system(os.fstat(handle).st_dev) not in _LOCAL:
            return False
        fcntl.fcntl(handle, fcntl.F_SETSIG, signal.SIGURG)
        fcntl.fcntl(handle, fcntl.F_SETLEASE, fcntl.F_RDLCK)
        fcntl.fcntl(handle, fcntl.F_SETLEASE, fcntl.F_UNLCK)
    except OSError as error:
        return error.errno == errno.EAGAIN
    finally:
        os.close(handle)
    return False


@cache
def _file_system(device: int) -> str:
    """Return the kind of the file system with this device number; nothing where the system does not tell."""
    wanted = f"{os.major(device)}:{os.minor(device)}"
    try:
        lines = Path("/proc/self/mountinfo").read_text(encoding="utf-8", errors="replace").splitlines()
    except OSError:
        return ""
    for line in lines:
        words = line.split()
        if words[2] == wanted:
            return words[words.index("-") + 1]
    return ""
