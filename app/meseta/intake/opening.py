"""Opening a file: content decides the reader; checksum, metadata from names, sidecars and tables are added."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import partial
from pathlib import Path
from typing import Final

from meseta.errors import InputError, MesetaError, printable
from meseta.intake.meaning.opening_layouts import opened_for_layouts
from meseta.intake.readers.contents import Contents
from meseta.intake.readers.unpack import peek_bytes, sha256_of
from meseta.intake.recording import Recording
from meseta.intake.registry import find_reader
from meseta.recipe import Recipe
from meseta.recipe.intake import IntakeSettings
from meseta.traces import Source

__all__ = ["OpenContext", "open_recording", "recording_of", "sha256_of"]

HEAD_BYTE: Final = 1 << 16


@dataclass(frozen=True)
class OpenContext:
    """What is the same for all files of a batch.

    Attributes
    ----------
    table : mapping
        The metadata table by file name.
    sidecars : mapping, optional
        Names of all files that may be sidecars, by folder; a folder that is not in it is looked into file by file.
    same_names : frozenset of str, optional
        Names that files of several folders have.
    """

    table: Mapping[str, Mapping[str, str | int | float | bool]] = field(default_factory=dict)
    sidecars: Mapping[Path, frozenset[str]] = field(default_factory=dict)
    same_names: frozenset[str] = frozenset()


def open_recording(
    path: str | Path,
    recipe: Recipe | None = None,
    name: str = "",
    context: OpenContext | None = None,
    *,
    checksum: bool = True,
) -> Recording:
    """Open a file as a recording; samples are read lazily where the format allows it.

    Parameters
    ----------
    path : str or Path
    recipe : Recipe, optional
        Its ``intake`` section is used.
    name : str
        Name relative to the folder that was given; the file's own name where empty.
    context : OpenContext, optional
        Of the batch that the file belongs to.
    checksum : bool
        False leaves ``source.sha256`` empty where it would cost another read: the caller adds it.

    Raises
    ------
    InputError
        Where the file is missing, not readable, damaged, or of no known layout.
    """
    path, settings = Path(path), (recipe or Recipe()).intake
    found = context or OpenContext()
    layouts = settings.layouts_in_use()
    if not layouts:
        return _opened(path, settings, name, found, checksum=checksum)
    return opened_for_layouts(
        layouts, settings, lambda one: _opened(path, one, name, found, checksum=checksum), partial(_recognised, path)
    )


def _recognised(path: Path) -> bool:
    """Return whether a file says itself of what format it is."""
    try:
        find_reader(peek_bytes(path, HEAD_BYTE)[0], path, None)
    except (MesetaError, OSError, EOFError):
        return False
    return True


def _opened(path: Path, settings: IntakeSettings, name: str, context: OpenContext, *, checksum: bool) -> Recording:
    try:
        size = path.stat().st_size
        if size == 0:
            raise InputError("is empty", str(path), "check how it was written")
        head, packed = peek_bytes(path, HEAD_BYTE)
        reader = find_reader(head, path, settings.reader, settings.binary_type is not None)
        if packed and reader.name not in ("text", "NumPy"):
            raise InputError(f"is a packed {reader.name} file", str(path), "unpack it first")
        contents = reader.open(path, settings)
        digest = contents.sha256 or (sha256_of(path) if checksum else "")
    except MesetaError:
        raise
    except PermissionError as error:
        raise InputError("may not be read", str(path), "check its permissions") from error
    except FileNotFoundError as error:
        raise InputError("does not exist", str(path), "check the path") from error
    except (OSError, EOFError) as error:
        raise InputError(f"cannot be read ({error})", str(path), "check the file and the disk") from error
    except MemoryError as error:
        raise InputError("is too large for the memory", str(path), "cut it into smaller files") from error
    return recording_of(contents, digest, (path, name, size), reader.name, settings, context)


def recording_of(
    contents: Contents,
    sha256: str,
    file: tuple[Path, str, int],
    reader: str,
    settings: IntakeSettings,
    context: OpenContext,
) -> Recording:
    """Return the recording of a file's contents, with what stands beside the file.

    Parameters
    ----------
    contents : Contents
    sha256 : str
    file : (Path, str, int)
        Its path, name relative to the folder that was given, and size in bytes.
    reader : str
        Name of the reader.
    settings : IntakeSettings
    context : OpenContext
    """
    from meseta.intake.meaning.context import beside

    path, name, size = file
    recording = _recording(contents, Source(sha256, name or printable(path.name), size, reader, contents.layout))
    found, doubts = beside(path, recording.source.name, settings, context, contents.metadata)
    if not doubts and found == contents.metadata:
        return recording
    stated = [key for key in contents.table if key in found and found[key] != contents.metadata.get(key)]
    if stated:  # what is said of the whole file later wins over its traces, too
        recording = replace(
            recording, table={key: one for key, one in contents.table.items() if key not in stated}, like=None
        )
        doubts += [f"{key} is stated for each trace, and for the file beside it: the latter is used" for key in stated]
    return replace(recording, metadata=found, doubts=(*contents.doubts, *doubts))


def _recording(contents: Contents, source: Source) -> Recording:
    return Recording(
        source=source,
        channels=contents.channels,
        offsets=contents.offsets,
        record_start=contents.record_start,
        dataset=contents.dataset,
        metadata=contents.metadata,
        table=contents.table,
        doubts=contents.doubts,
        close=contents.close,
        like=contents.like,
    )
