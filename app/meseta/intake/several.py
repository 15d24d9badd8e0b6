"""Small files of a batch, opened together: each is read once, and those that are written alike are parsed in one go."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Final, Protocol, cast

from meseta.errors import InputError, MesetaError
from meseta.intake.files import FoundFile
from meseta.intake.opening import HEAD_BYTE, OpenContext, open_recording, recording_of
from meseta.intake.readers import unpack
from meseta.intake.readers.contents import Contents
from meseta.intake.recording import Recording
from meseta.intake.registry import find_reader
from meseta.recipe import Recipe
from meseta.recipe.intake import IntakeSettings

__all__ = ["batches_of", "open_several"]

BATCH_FILES: Final = 32
BATCH_BYTE: Final = 4 << 20
"""So much is parsed in one go at most: the first traces come soon, and memory stays small."""


class ReaderOfSeveral(Protocol):
    """A reader that can open small files together; see :meth:`meseta.intake.readers.text.TextReader.open_alike`."""

    name: str

    def open_alike(
        self, texts: Sequence[tuple[Path, bytes]], settings: IntakeSettings
    ) -> Mapping[int, Contents | None]:
        """Return the contents of files that are written like one that was opened before."""
        ...


@dataclass(frozen=True)
class _AtHand:
    """A small file whose bytes were read."""

    file: FoundFile
    data: bytes
    reader: ReaderOfSeveral


def batches_of(files: Sequence[FoundFile]) -> list[list[FoundFile]]:
    """Cut files into batches of small ones in a row, and large ones alone."""
    batches: list[list[FoundFile]] = []
    room = 0
    for file in files:
        try:
            size = file.path.stat().st_size
        except OSError:
            size = BATCH_BYTE
        if not batches or size > room or len(batches[-1]) >= BATCH_FILES:
            batches.append([])
            room = BATCH_BYTE
        batches[-1].append(file)
        room -= size
    return batches


def open_several(files: Sequence[FoundFile], recipe: Recipe, context: OpenContext) -> Iterator[Recording | InputError]:
    """Yield a recording a file, or what is wrong with it, in order; each is what :func:`open_recording` gives.

    Parameters
    ----------
    files : sequence of FoundFile
        A batch of :func:`batches_of`.
    recipe : Recipe
    context : OpenContext
    """
    together = len(files) > 1 and not recipe.intake.layouts_in_use()
    at_hand = _at_hand(files, recipe.intake) if together else {}
    opened: dict[int, Recording | None] = {}
    for place, file in enumerate(files):
        if place in at_hand and place not in opened:
            rest = {other: one for other, one in at_hand.items() if other >= place and other not in opened}
            opened |= _opened_alike(rest, recipe.intake, context)
        found = opened.get(place)
        try:
            yield open_recording(file.path, recipe, file.name, context) if found is None else found
        except InputError as error:
            yield error


def _at_hand(files: Sequence[FoundFile], settings: IntakeSettings) -> dict[int, _AtHand]:
    """Return the bytes of those files whose reader opens several together, by place."""
    found = {}
    for place, file in enumerate(files):
        try:
            data = _small_file(file.path)
            if not data or unpack.packing(data[:8]):
                continue
            reader = find_reader(data[:HEAD_BYTE], file.path, settings.reader, settings.binary_type is not None)
        except (MesetaError, OSError, MemoryError):
            continue  # opened on its own, it says what is wrong
        if hasattr(reader, "open_alike"):
            found[place] = _AtHand(file, data, cast("ReaderOfSeveral", reader))
    return found


def _small_file(path: Path) -> bytes:
    """Return the bytes of a file in as few calls as there can be; nothing where it is not small, or not read whole."""
    descriptor = os.open(path, os.O_RDONLY | getattr(os, "O_BINARY", 0))
    try:
        size = os.fstat(descriptor).st_size
        data = os.read(descriptor, size + 1) if size <= BATCH_BYTE else b""
    finally:
        os.close(descriptor)
    return data if len(data) == size else b""


def _opened_alike(
    at_hand: Mapping[int, _AtHand], settings: IntakeSettings, context: OpenContext
) -> dict[int, Recording | None]:
    """Return recordings by place; None where a file must be opened on its own."""
    places = list(at_hand)
    reader = at_hand[places[0]].reader
    places = [place for place in places if at_hand[place].reader is reader]
    texts = [(at_hand[place].file.path, at_hand[place].data) for place in places]
    found: dict[int, Recording | None] = {}
    for at, contents in reader.open_alike(texts, settings).items():
        one = at_hand[places[at]]
        found[places[at]] = None
        if contents is not None:
            file = (one.file.path, one.file.name, len(one.data))
            with suppress(InputError):  # of what stands beside it: opened on its own, it says so
                digest = unpack.sha256_of_bytes(one.data)
                found[places[at]] = recording_of(contents, digest, file, reader.name, settings, context)
    return found
