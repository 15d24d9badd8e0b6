"""Text tables: comma, tab, semicolon or blanks; one trace a file, wide, long, or many traces one after the other."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.metadata import Plain, canonical
from meseta.intake.readers.contents import Contents, columns_of, make_channel, whole
from meseta.intake.readers.spool import SpooledColumn
from meseta.intake.readers.text_form import KnownForm, TextForm, decode_head, entries_of, find_form, known_form
from meseta.intake.readers.text_rows import Columns, numbers
from meseta.intake.readers.text_stream import put_aside
from meseta.intake.readers.unpack import members_of, read_bytes, unpacked_blocks, unpacked_members
from meseta.intake.recording import RawChannel
from meseta.intake.roles import guess_role, stem_of
from meseta.intake.rows import end_to_end
from meseta.recipe.intake import IntakeSettings
from meseta.traces import ArraySamples, Samples

__all__ = ["TextReader"]

HEAD_BYTE: Final = 1 << 16
NUMBERS: Final = np.dtype(np.float64)
LARGE_BYTE: Final = 64 << 20
"""Larger texts are parsed block by block, and their numbers put aside in a temporary file."""


class TextReader:
    """Reads text tables; the form of the last one is tried first, as files of one night are written alike."""

    name = "text"

    def __init__(self) -> None:
        self._last: KnownForm | None = None

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return whether the first bytes are text; whether it holds rows of numbers shows when it is opened."""
        return bool(head) and (b"\x00" not in head or decode_head(head).startswith("utf-16"))

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Read the whole table."""
        found = read_bytes(path, LARGE_BYTE)
        if found is None:
            return _large_contents(path, settings)
        data, sha256 = found
        if not data and (members := members_of(path)):
            return _from_members(path, members, settings)
        last = self._last
        if last is not None and last.fits(data):
            try:
                return replace(_contents(data, "utf-8", last.form, path, settings), sha256=sha256)
            except InputError:
                self._last = None  # looked at anew: the fault is then named for what the file itself says
        encoding, data, form = _recognised(data, path)
        contents = _contents(data, encoding, form, path, settings)
        self._last = known_form(data, form) if encoding == "utf-8" else None
        return replace(contents, sha256=sha256)


def _recognised(data: bytes, path: Path) -> tuple[str, bytes, TextForm]:
    """Return encoding, bytes with line feeds at the ends of lines, and form of a text table."""
    encoding = decode_head(data[:HEAD_BYTE])
    if encoding in ("utf-8", "latin-1", "utf-8-sig") and b"\x00" in data[:HEAD_BYTE]:
        raise InputError("holds NUL bytes and is no text table", str(path), "export it again as text")
    if b"\r" in data[:HEAD_BYTE] and b"\n" not in data[:HEAD_BYTE]:
        data = data.replace(b"\r", b"\n")
    head = _text(data[:HEAD_BYTE], encoding)
    form = find_form(head)
    if form is None:
        what = "is empty" if not data.strip() else "holds no rows of numbers"
        if data.strip() and path.suffix.lower() in (".h5", ".hdf5", ".hdf", ".he5"):
            what = "is named like HDF5 but is a text and not an HDF5 file"
        raise InputError(what, str(path), "give a table with numbers in rows")
    return encoding, data, form


def _contents(data: bytes, encoding: str, form: TextForm, path: Path, settings: IntakeSettings) -> Contents:
    """Return the content of a text table of known form."""
    body = _body(data, form, encoding)
    rows = numbers(body, form, path, form.skip_lines)
    if not rows.lengths:
        raise InputError("holds no rows of numbers", str(path), "give a table with numbers in rows")
    columns = [ArraySamples(column) for column in rows.columns]
    table = _Table(columns, rows.lengths, rows.said, lambda: _lengths(rows.columns))
    return _laid_out(table, form, _doubts(data, encoding, form), settings, path)


def _large_contents(path: Path, settings: IntakeSettings) -> Contents:
    """Return the content of a large text, its numbers put aside."""
    head = next(unpacked_blocks(path, HEAD_BYTE))
    encoding, _, form = _recognised(head, path)
    columns, stretches = put_aside(path, form, encoding)
    samples = [SpooledColumn(columns, place, columns.rows) for place in range(form.columns)]
    table = _Table(samples, stretches.lengths, stretches.said, lambda: columns.last_number)
    return _laid_out(table, form, _doubts(head, encoding, form), settings, path)


def _from_members(path: Path, members: Sequence[str], settings: IntakeSettings) -> Contents:
    """Return the tables in a zip one after the other; what cannot be read, or has other channels, is a doubt."""
    good: list[tuple[str, Contents]] = []
    doubts: list[str] = []
    for name, data in unpacked_members(path, members):
        try:
            found = _contents(*_unsniffed(data, path), path, settings)
        except InputError as error:
            doubts.append(f"'{name}' in it {error.what}")
            continue
        if good and _kinds(found) != _kinds(good[0][1]):
            doubts.append(f"'{name}' in it has other channels than '{good[0][0]}' and was left out")
        else:
            good.append((name, found))
    if not good:
        raise InputError(f"holds no table that can be read ({'; '.join(doubts[:3])})", str(path), "unpack it and look")
    first = good[0][1]
    bases = np.concatenate([[0], np.cumsum([int(one.offsets[-1]) for _, one in good])]).astype(np.int64)
    channels = tuple(
        replace(channel, samples=end_to_end([one.channels[place].samples for _, one in good]))
        for place, channel in enumerate(first.channels)
    )
    counts = [len(one.offsets) - 1 for _, one in good]
    rows = [row for (_, one), count in zip(good, counts, strict=True) for row in [dict(one.metadata)] * count]
    columns = {name: column for name, column in columns_of(rows).items() if len(np.unique(column)) > 1}
    return Contents(
        layout=f"{len(good)} tables in a zip; the first: {first.layout}",
        channels=channels,
        offsets=np.concatenate([[0], *(one.offsets[1:] + base for (_, one), base in zip(good, bases, strict=False))]),
        record_start=np.concatenate([one.record_start for _, one in good]),
        dataset=np.repeat(np.array([name for name, _ in good], np.str_), counts),
        metadata=first.metadata,
        table=columns,
        doubts=tuple(dict.fromkeys([*doubts, *(doubt for _, one in good for doubt in one.doubts)])),
    )


def _unsniffed(data: bytes, path: Path) -> tuple[bytes, str, TextForm]:
    encoding, data, form = _recognised(data, path)
    return data, encoding, form


def _kinds(contents: Contents) -> list[tuple[str, str, str]]:
    return [(channel.name, channel.role, channel.unit) for channel in contents.channels]


def _doubts(data: bytes, encoding: str, form: TextForm) -> list[str]:
    odd = encoding == "latin-1" and any(byte > 127 for byte in data[:HEAD_BYTE])
    return [*form.doubts, *(["not UTF-8: read as Latin-1"] if odd else [])]


def _text(data: bytes, encoding: str) -> str:
    if encoding.startswith("utf-16") and len(data) % 2:
        data = data[:-1]
    return data.decode(encoding, "replace")


def _body(data: bytes, form: TextForm, encoding: str) -> bytes:
    """Return the rows of numbers, in UTF-8, without the lines before them."""
    if encoding.startswith("utf-16"):
        data = _text(data, encoding).encode()
    elif encoding == "utf-8-sig":
        data = data[3:]
    at = 0
    for _ in range(form.skip_lines):
        at = data.index(b"\n", at) + 1
    return data[at:]


# -- how traces stand in the columns ----------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Table:
    """Columns of numbers, rows and lines before each stretch, and how far down each column is filled."""

    columns: Sequence[Samples]
    lengths: list[int]
    said: Sequence[tuple[str, ...]]
    filled: Callable[[], Sequence[int]]


def _laid_out(table: _Table, form: TextForm, doubts: list[str], settings: IntakeSettings, path: Path) -> Contents:
    metadata, more = canonical(form.entries, str(path))
    doubts = [*doubts, *more]
    names = list(form.names) if form.names else [f"column {n + 1}" for n in range(form.columns)]
    wide = _wide_sets(names, settings) if len(table.lengths) == 1 else None
    words = {"\t": "tab", " ": "blank", ",": "comma", ";": "semicolon"}[form.delimiter]
    if wide:
        return _wide(names, form.units, table, wide, metadata, doubts, words)
    channels = [
        make_channel(name, column, NUMBERS, unit=unit, unit_ground="unit row")
        for name, unit, column in zip(names, form.units, table.columns, strict=True)
    ]
    channels = [_from_metadata(channel, metadata) if len(channels) <= 2 else channel for channel in channels]
    offsets, starts, dataset = whole(len(table.columns[0]))
    layout = f"{words}-separated, {len(names)} column{'s' if len(names) > 1 else ''}"
    if len(table.lengths) > 1:
        offsets = np.concatenate([[0], np.cumsum(table.lengths)]).astype(np.int64)
        starts, dataset = offsets[:-1].copy(), np.full(len(table.lengths), "", np.str_)
        layout += f", {len(table.lengths)} blocks"
    rows = _said_of_each(table, form, path)
    return Contents(layout, tuple(channels), offsets, starts, dataset, metadata, rows, tuple(doubts))


def _said_of_each(table: _Table, form: TextForm, path: Path) -> dict[str, npt.NDArray[Any]]:
    """Return what lines before each stretch say where they do not all say the same ("bias_mV: 100", "bias_mV: 200")."""
    if not any(table.said):
        return {}
    whole_file = canonical(form.entries, str(path))[0]
    entries = [canonical(entries_of(lines, form.heading, form.delimiter), str(path))[0] for lines in table.said]
    columns = columns_of([whole_file | own for own in entries])
    return {name: column for name, column in columns.items() if len(np.unique(column)) > 1}


def _wide_sets(names: Sequence[str], settings: IntakeSettings) -> dict[str, list[int]] | None:
    """Return stem -> columns where traces stand side by side; None where columns are channels of one trace."""
    if settings.layout in ("one_trace_a_file", "long"):
        return None
    if settings.layout in ("wide", "columns") and all(name.startswith("column ") for name in names):
        return {names[0]: [0], "column": list(range(1, len(names)))} if len(names) > 1 else None
    sets: dict[str, list[int]] = {}
    for place, name in enumerate(names):
        sets.setdefault(stem_of(name), []).append(place)
    largest = max(len(places) for places in sets.values())
    if largest < 2 or (largest == 2 and len(sets) > 2) or any(name.startswith("column ") for name in names):
        return None
    exact = {guess_role(names[place]).role for places in sets.values() if len(places) == largest for place in places}
    if len(exact) > 1 and settings.layout != "wide" and largest == 2:
        return None
    if any(len(places) not in (1, largest) for places in sets.values()):
        return None
    return sets


def _wide(
    names: Sequence[str],
    units: Sequence[str],
    table: _Table,
    sets: dict[str, list[int]],
    metadata: dict[str, Plain],
    doubts: Sequence[str],
    words: str,
) -> Contents:
    pieces = max(len(places) for places in sets.values())
    main = next(places for places in sets.values() if len(places) == pieces)
    filled = table.filled()
    kept = [filled[place] for place in main]
    offsets = np.concatenate([[0], np.cumsum(kept)]).astype(np.int64)
    channels = []
    for stem, places in sets.items():
        heading, shared = names[places[0]], len(places) != pieces
        samples: Samples = table.columns[places[0]]
        if not shared:
            samples = end_to_end([_Top(table.columns[place], n) for place, n in zip(places, kept, strict=True)])
        name = heading if shared else stem
        channel = make_channel(name, samples, NUMBERS, unit=units[places[0]], unit_ground="unit row", shared=shared)
        if not shared and channel.role in ("other", "trace_number"):
            channel = _from_metadata(_renamed(heading, stem, samples, units[places[0]]), metadata)
        channels.append(channel)
    numbered = [re.search(r"(\d+)\D*$", names[place]) for place in main]
    dataset = np.array([names[place] for place in main], np.str_)
    rows: list[dict[str, Plain]] = [{"column_number": int(found[1])} if found else {} for found in numbered]
    layout = f"{words}-separated, {pieces} traces side by side"
    starts = np.zeros(pieces, np.int64)
    return Contents(layout, tuple(channels), offsets, starts, dataset, metadata, columns_of(rows), tuple(doubts))


@dataclass(frozen=True)
class _Top:
    """The first samples of a column."""

    column: Samples
    rows: int

    def __len__(self) -> int:
        return self.rows

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        return self.column.read(start, min(stop, self.rows))


def _renamed(heading: str, stem: str, samples: Samples, unit: str) -> RawChannel:
    """Return a channel of numbered columns; "trace_3 (nA)" is not a trace number but a current."""
    channel = make_channel(heading, samples, NUMBERS, unit=unit, unit_ground="unit row")
    role = "other" if channel.role in ("trace_number", "phase", "range_code") else channel.role
    return RawChannel(stem, channel.samples, role, channel.unit, ground=channel.ground, confidence=channel.confidence)


def _from_metadata(channel: RawChannel, metadata: dict[str, Plain]) -> RawChannel:
    """Return a channel that says nothing itself with what lines before the numbers say ("unit: nA")."""
    if channel.role != "other":
        return channel
    lowered = {str(key).lower(): value for key, value in metadata.items()}
    said = next((str(lowered[key]) for key in ("quantity", "signal", "values", "channel") if key in lowered), "")
    unit = next((str(lowered[key]) for key in ("unit", "units", "value_unit") if key in lowered), "")
    guess = guess_role(said or unit, unit) if said or unit else None
    if guess is None or guess.role == "other":
        return channel
    return RawChannel(
        channel.name, channel.samples, guess.role, guess.unit, shared=channel.shared, ground="header", confidence=0.8
    )


def _lengths(columns: Columns) -> list[int]:
    """Return the length of each column without the empty cells below its last number."""
    kept = []
    for column in columns:
        finite = ~np.isnan(column)
        kept.append(len(column) if finite[-1:].all() else (int(np.flatnonzero(finite)[-1]) + 1 if finite.any() else 0))
    return kept
