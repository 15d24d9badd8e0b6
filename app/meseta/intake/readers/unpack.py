"""The bytes of a file, unpacked where it is gzip, xz, bzip2 or a zip with one member, within limits."""

from __future__ import annotations

import bz2
import gzip
import hashlib
import io
import lzma
import zipfile
import zlib
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import IO, Any, Final

from natsort import natsorted, ns

from meseta.errors import InputError

__all__ = [
    "PACKED",
    "files_in",
    "inflated",
    "members_of",
    "peek_bytes",
    "read_bytes",
    "sha256_of",
    "sha256_of_bytes",
    "unpacked_blocks",
    "unpacked_members",
]

BOMB_RATIO: Final = 500
BOMB_BYTE: Final = 64 << 20
PACKED: Final = {b"\x1f\x8b": "gzip", b"\xfd7zXZ\x00": "xz", b"BZh": "bzip2", b"PK\x03\x04": "zip"}


def sha256_of(path: Path) -> str:
    """Return the SHA-256 of a file's bytes in hexadecimal."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def sha256_of_bytes(data: bytes) -> str:
    """Return the SHA-256 of bytes in hexadecimal."""
    return hashlib.sha256(data).hexdigest()


def packing(head: bytes) -> str:
    """Return the name of the packing by its signature; empty where the file is not packed."""
    return next((name for mark, name in PACKED.items() if head.startswith(mark)), "")


def _opened(path: Path, kind: str) -> IO[bytes] | Any:
    if kind == "gzip":
        return gzip.open(path, "rb")
    if kind == "xz":
        return lzma.open(path, "rb")
    if kind == "bzip2":
        return bz2.open(path, "rb")
    with zipfile.ZipFile(path) as archive:  # the stream of a member holds the file open
        members = _plain_members(archive)
        if len(members) != 1:
            raise InputError(f"holds {len(members)} files", str(path), "unpack it and give the folder")
        if members[0].flag_bits & 1:
            raise InputError("is locked with a password", str(path), "unpack it first")
        return archive.open(members[0])


def _declared_byte(path: Path) -> int:
    """Return how much the files of a zip unpack to, as it says itself."""
    with zipfile.ZipFile(path) as archive:
        return sum(info.file_size for info in _plain_members(archive))


def _plain_members(archive: zipfile.ZipFile) -> list[zipfile.ZipInfo]:
    """Return the files of a zip, without what systems put beside them, in natural order."""
    found = [info for info in files_in(archive) if not info.filename.startswith("__MACOSX")]
    return natsorted(
        [info for info in found if not info.filename.rpartition("/")[2].startswith(".")],
        key=lambda info: info.filename,
        alg=ns.PATH,
    )


def members_of(path: Path) -> list[str]:
    """Return the names of the files in a zip; nothing where the file is none.

    Raises
    ------
    InputError
        Where the zip is damaged, or would unpack beyond reason.
    """
    with path.open("rb") as file:
        if packing(file.read(8)) != "zip":
            return []
    try:
        with zipfile.ZipFile(path) as archive:
            members = _plain_members(archive)
    except (OSError, zipfile.BadZipFile, NotImplementedError, ValueError) as error:
        raise InputError(f"is damaged zip ({error})", str(path), "pack the file again") from error
    limit = max(BOMB_BYTE, BOMB_RATIO * path.stat().st_size)
    if len(members) > 1 and sum(info.file_size for info in members) > limit:
        raise InputError(f"unpacks to more than {limit >> 20} MB", str(path), "unpack it yourself if it is meant to")
    return [info.filename for info in members]


def unpacked_members(path: Path, names: Sequence[str]) -> Iterator[tuple[str, bytes]]:
    """Yield name and bytes of files in a zip.

    Raises
    ------
    InputError
        Where one is damaged or locked.
    """
    try:
        with zipfile.ZipFile(path) as archive:
            for name in names:
                yield name, archive.read(name)
    except (OSError, EOFError, lzma.LZMAError, zlib.error, zipfile.BadZipFile, NotImplementedError) as error:
        raise InputError(f"is damaged zip ({error})", str(path), "pack the file again") from error
    except RuntimeError as error:  # a password is wanted
        raise InputError("is locked with a password", str(path), "unpack it first") from error


def _first_member(path: Path) -> Any:
    """Return the first file of a zip, which tells what kind of files it holds."""
    with zipfile.ZipFile(path) as archive:
        members = files_in(archive)
        if not members or members[0].flag_bits & 1:
            raise InputError("is an empty or locked zip", str(path), "unpack it first")
        return archive.open(members[0])


def files_in(archive: zipfile.ZipFile) -> list[zipfile.ZipInfo]:
    """Return the members of a zip that are no folders; a damaged one may have no name."""
    return [info for info in archive.infolist() if info.filename and not info.filename.endswith("/")]


def peek_bytes(path: Path, count: int) -> tuple[bytes, bool]:
    """Return the first bytes of a file, unpacked, and whether it is packed.

    Raises
    ------
    InputError
        Where the file cannot be read or unpacked.
    """
    with path.open("rb") as file:
        head = file.read(count)
    kind = packing(head)
    if not kind:
        return head, False
    try:
        with _first_member(path) if kind == "zip" else _opened(path, kind) as stream:
            return bytes(stream.read(count)), True
    except (OSError, EOFError, lzma.LZMAError, zlib.error, zipfile.BadZipFile, NotImplementedError) as error:
        raise InputError(f"is damaged {kind} ({error})", str(path), "pack the file again") from error


def read_bytes(path: Path, most_byte: int) -> tuple[bytes, str] | None:
    """Return all bytes of a file, unpacked, and the checksum of it as it lies there; None where there are too many.

    Of a zip with several files no bytes are returned: :func:`members_of` tells their names.  A file that unpacks beyond
    reason is refused.

    Raises
    ------
    InputError
        Where the file cannot be read or unpacked, or is a compression bomb.
    """
    if path.stat().st_size > most_byte and len(members_of(path)) < 2:
        return None
    data = path.read_bytes()
    sha256 = sha256_of_bytes(data)
    kind = packing(data[:8])
    if not kind:
        return data, sha256
    if kind == "zip" and len(members_of(path)) > 1:
        return b"", sha256
    unpacked = io.BytesIO()
    for block in unpacked_blocks(path, 1 << 22):
        unpacked.write(block)
        if unpacked.tell() > most_byte:
            return None
    return unpacked.getvalue(), sha256


def unpacked_blocks(path: Path, block_byte: int) -> Iterator[bytes]:
    """Yield the bytes of a file, unpacked, block by block.

    Raises
    ------
    InputError
        Where the file cannot be read or unpacked, or is a compression bomb.
    """
    with path.open("rb") as file:
        kind = packing(file.read(8))
    limit = max(BOMB_BYTE, BOMB_RATIO * path.stat().st_size)
    count = 0
    bomb = InputError(f"unpacks to more than {limit >> 20} MB", str(path), "unpack it yourself if it is meant to")
    try:
        with _opened(path, kind) if kind else path.open("rb") as stream:
            if kind == "zip" and _declared_byte(path) > limit:  # nothing needs to be unpacked
                raise bomb
            while block := stream.read(block_byte):
                count += len(block)
                if kind and count > limit:
                    raise bomb
                yield block
    except (OSError, EOFError, lzma.LZMAError, zlib.error, zipfile.BadZipFile, NotImplementedError) as error:
        if not kind:
            raise
        raise InputError(f"is damaged {kind} ({error})", str(path), "pack the file again") from error


def inflated(path: Path, place: int, size: int, most_byte: int) -> Iterator[bytes]:
    """Yield the first ``most_byte`` bytes of what is packed in ``size`` bytes of a file (zlib), block by block.

    Raises
    ------
    zlib.error
        Where they are damaged.
    """
    unpacker = zlib.decompressobj()
    with path.open("rb") as file:
        file.seek(place)
        while most_byte and not unpacker.eof:
            packed = unpacker.unconsumed_tail
            if not packed:
                packed = file.read(min(size, 1 << 20))
                size -= len(packed)
            block = unpacker.decompress(packed, min(most_byte, 1 << 22))
            if not (packed or block):
                return
            most_byte -= len(block)
            yield block
