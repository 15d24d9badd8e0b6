"""Text tables: comma, tab, semicolon or blanks; one trace a file, wide, long, or many traces one after the other."""

from __future__ import annotations

from collections.abc import Sequence
from contextlib import suppress
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Final

import numpy as np

from meseta.errors import InputError
from meseta.intake.meaning.roles import guess_role, told_role
from meseta.intake.readers.contents import Contents, columns_of, whole
from meseta.intake.readers.spool import Spool, SpooledColumn, kept_in
from meseta.intake.readers.text_cells import CLEARLY_GROUPED
from meseta.intake.readers.text_encoding import ENCODINGS, decode_head
from meseta.intake.readers.text_form import KnownForm, TextForm, known_form
from meseta.intake.readers.text_layout import Table, laid_out
from meseta.intake.readers.text_odd import BadCellError, OddColumns
from meseta.intake.readers.text_rows import Columns, Rows, numbers, numbers_of_each
from meseta.intake.readers.text_search import find_form, obstacle_of
from meseta.intake.readers.text_stream import put_aside
from meseta.intake.readers.unpack import members_of, read_bytes, unpacked_blocks, unpacked_members
from meseta.intake.rows import end_to_end
from meseta.recipe.intake import IntakeSettings
from meseta.traces import ArraySamples

__all__ = ["TextReader"]

HEAD_BYTE: Final = 1 << 16
LONG_HEAD_BYTE: Final = 4 << 20
FEW_LINES: Final = 8
MOST_COLUMNS: Final = 50_000
LARGE_BYTE: Final = 64 << 20
"""Larger texts are parsed block by block, and their numbers put aside in a temporary file."""
KEPT_FORMS: Final = 4
"""Forms that are remembered: the files of one night are written in one or two ways."""


@dataclass(frozen=True)
class _Known:
    """The form of a file, and what follows from it alone for every other file that is written alike."""

    form: KnownForm
    layout: str
    """``intake.layout``, the only setting that it depends on."""
    emptied: Contents | None
    """The content of a file of this form whose rows are one trace, without its samples; None where they were not."""

    def fits(self, data: bytes, settings: IntakeSettings) -> bool:
        """Return whether another file begins in this form."""
        return self.layout == settings.layout and self.form.fits(data)

    def contents(self, rows: Rows, path: Path, settings: IntakeSettings) -> Contents:
        """Return the content of another file of this form."""
        if self.emptied is None or not _is_one_trace(rows):
            return _laid_rows(rows, self.form.form, [], settings, path)
        return _refilled(self.emptied, rows)


class TextReader:
    """Reads text tables; the forms of the last ones are tried first, as files of one night are written alike."""

    name = "text"

    def __init__(self) -> None:
        self._known: tuple[_Known, ...] = ()

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
        known = next((one for one in self._known if one.fits(data, settings)), None)
        if known is not None:
            try:
                rows = _rows(data, "utf-8", known.form.form, path)
                return replace(known.contents(rows, path, settings), sha256=sha256)
            except InputError:  # looked at anew: the fault is then named for what the file itself says
                self._known = tuple(one for one in self._known if one is not known)
        encoding, data, form = _recognised(data, path)
        contents, rows, odd = _read(data, encoding, form, settings, path)
        remembered = known_form(data, form) if encoding == "utf-8" and not odd.is_any else None
        if remembered is not None:
            newest = _Known(remembered, settings.layout, _emptied(contents, rows, form))
            kept = [one for one in self._known if (one.form.before, one.layout) != (remembered.before, newest.layout)]
            self._known = (newest, *kept[: KEPT_FORMS - 1])
        return replace(contents, sha256=sha256)

    def open_alike(self, texts: Sequence[tuple[Path, bytes]], settings: IntakeSettings) -> dict[int, Contents | None]:
        """Return the contents of files that are written like one that was opened before, all parsed in one go.

        Parameters
        ----------
        texts : sequence of (path, bytes)
            Small files that are not packed.
        settings : IntakeSettings

        Returns
        -------
        mapping of int to Contents or None
            By place; None where a file begins like a known one and goes on in another way, so that it must be opened on
            its own.  Files that begin in a new way are left out.
        """
        by_form: dict[int, list[int]] = {}
        knowns, found = self._known, dict[int, Contents | None]()
        for place, (_, data) in enumerate(texts):
            number = next((number for number, one in enumerate(knowns) if one.fits(data, settings)), None)
            if number is not None:
                by_form.setdefault(number, []).append(place)
        for number, places in by_form.items():
            known = knowns[number]
            rows = numbers_of_each([texts[place][1][len(known.form.before) :] for place in places], known.form.form)
            for at, place in enumerate(places):
                found[place] = None
                if rows is not None:
                    with suppress(InputError):
                        found[place] = known.contents(rows[at], texts[place][0], settings)
        return found


def _is_one_trace(rows: Rows) -> bool:
    return len(rows.lengths) == 1 and not any(rows.said)


def _emptied(contents: Contents, rows: Rows, form: TextForm) -> Contents | None:
    """Return content without its samples; None where it is not one trace whose columns are its channels."""
    if not _is_one_trace(rows) or contents.table or len(contents.channels) != form.columns:
        return None
    channels = tuple(channel.without_samples() for channel in contents.channels)
    return replace(contents, channels=channels, like=object()) if len(contents.offsets) == 2 else None


def _refilled(emptied: Contents, rows: Rows) -> Contents:
    channels = tuple(
        channel.with_samples(ArraySamples(column))
        for channel, column in zip(emptied.channels, rows.columns, strict=True)
    )
    return Contents(
        emptied.layout,
        channels,
        *whole(rows.lengths[0]),
        metadata=emptied.metadata,
        doubts=emptied.doubts,
        like=emptied.like,
    )


def _recognised(data: bytes, path: Path) -> tuple[str, bytes, TextForm]:
    """Return encoding, bytes with line feeds at the ends of lines, and form of a text table."""
    encoding = decode_head(data[:HEAD_BYTE])
    if encoding in ("utf-8", "latin-1", "utf-8-sig") and b"\x00" in data[:HEAD_BYTE]:
        raise InputError("holds NUL bytes and is no text table", str(path), "export it again as text")
    if b"\r" in data[:HEAD_BYTE] and b"\n" not in data[:HEAD_BYTE]:
        data = data.replace(b"\r", b"\n")
    form = find_form(_text(_head(data, path), encoding))
    if form is None:
        what = "is empty" if not data.strip() else "holds no rows of numbers"
        if data.strip() and path.suffix.lower() in (".h5", ".hdf5", ".hdf", ".he5"):
            what = "is named like HDF5 but is a text and not an HDF5 file"
        raise _no_rows(what, _text(_head(data, path), encoding), path)
    if form.columns > MOST_COLUMNS:
        what = f"has {form.columns} cells in a row, more than traces side by side can be"
        raise InputError(what, str(path), "give a table with samples in rows, or the traces one after the other")
    return encoding, data, form


def _no_rows(what: str, head: str, path: Path) -> InputError:
    """Return the error of a text without rows of numbers, with the first cell that is in the way."""
    found = obstacle_of(head)
    if found is None:
        return InputError(what, str(path), "give a table with numbers in rows")
    line, column, word = found
    return InputError(
        f"{what} that can be told: '{word[:40]}' in column {column} is no number",
        f"{path}, line {line}",
        "give rows with a number in each column, or the same columns of words in every row",
    )


def _head(data: bytes, path: Path) -> bytes:
    """Return the first lines, as many as tell the form: of a table with long rows more bytes."""
    if len(data) <= HEAD_BYTE or data.count(b"\n", 0, HEAD_BYTE) >= FEW_LINES:
        return data[:HEAD_BYTE]
    end = 0
    for _ in range(FEW_LINES):
        found = data.find(b"\n", end, LONG_HEAD_BYTE) + 1
        if found == 0:
            break
        end = found
    if end == 0 and len(data) >= LONG_HEAD_BYTE:
        raise InputError("holds a line beyond reason", str(path), "give a table with numbers in rows")
    return data[: max(end, HEAD_BYTE)] if end else data


def _read(
    data: bytes, encoding: str, form: TextForm, settings: IntakeSettings, path: Path
) -> tuple[Contents, Rows, OddColumns]:
    """Return the content of a text table; a column that nobody needs may hold words here and there."""
    while True:
        odd = OddColumns(form.kinds, form.decimal)
        try:
            rows = _rows(data, encoding, form, path, odd)
        except BadCellError as error:
            form = _with_words(form, error, settings)
            continue
        return _laid_rows(rows, form, _doubts(data, encoding, form), settings, path, odd), rows, odd


def _with_words(form: TextForm, error: BadCellError, settings: IntakeSettings) -> TextForm:
    """Return the form with words in the column of a bad cell, where the column is nothing that is measured.

    A number whose thousands are clearly set apart is no bad cell.

    Raises
    ------
    BadCellError
        Where it is: the cell must be corrected.
    """
    place, kinds = error.column, list(form.kinds or ("number",) * form.columns)
    name = form.names[place] if place < len(form.names) else ""
    told = told_role(name, settings.channels) if name else None
    if kinds[place] == "number" and CLEARLY_GROUPED[form.decimal].match(error.word):
        kinds[place] = "grouped"
        return replace(form, kinds=tuple(kinds))
    is_needed = guess_role(name, form.units[place]).role != "other" if told is None else told.role != "ignore"
    if not name or is_needed or kinds[place] == "words" or kinds.count("words") == len(kinds) - 1:
        raise error
    kinds[place] = "words"
    return replace(form, kinds=tuple(kinds))


def _rows(data: bytes, encoding: str, form: TextForm, path: Path, odd: OddColumns | None = None) -> Rows:
    """Return the rows of a text table of known form."""
    rows = numbers(_body(data, form, encoding), form, path, form.skip_lines, odd=odd)
    if not rows.lengths:
        raise InputError("holds no rows of numbers", str(path), "give a table with numbers in rows")
    return rows


def _laid_rows(
    rows: Rows,
    form: TextForm,
    doubts: list[str],
    settings: IntakeSettings,
    path: Path,
    odd: OddColumns | None = None,
) -> Contents:
    """Return the content that rows of numbers in memory make."""
    columns = [ArraySamples(column) for column in rows.columns]
    table = Table(columns, rows.lengths, rows.said, lambda: _lengths(rows.columns), odd)
    return laid_out(table, form, doubts, settings, path)


def _large_contents(path: Path, settings: IntakeSettings) -> Contents:
    """Return the content of a large text, its numbers put aside."""
    head = next(unpacked_blocks(path, LONG_HEAD_BYTE))
    encoding, _, form = _recognised(head, path)
    while True:
        odd = OddColumns(form.kinds, form.decimal)
        try:
            columns, stretches = put_aside(path, form, encoding, odd)
            break
        except BadCellError as error:
            form = _with_words(form, error, settings)
    samples = [SpooledColumn(columns, place, columns.rows) for place in range(form.columns)]
    table = Table(samples, stretches.lengths, stretches.said, lambda: columns.last_number, odd)
    return laid_out(table, form, _doubts(head, encoding, form), settings, path)


def _from_members(path: Path, members: Sequence[str], settings: IntakeSettings) -> Contents:
    """Return the tables in a zip one after the other; what cannot be read, or has other channels, is a doubt."""
    good: list[tuple[str, Contents]] = []
    doubts: list[str] = []
    spool: Spool | None = None
    held_byte = 0
    for name, data in unpacked_members(path, members):
        try:
            found = _member(data, path, settings)
        except InputError as error:
            doubts.append(f"'{name}' in it {error.what}")
            continue
        if good and _kinds(found) != _kinds(good[0][1]):
            doubts.append(f"'{name}' in it has other channels than '{good[0][0]}' and was left out")
            continue
        held_byte += sum(len(channel.samples) * channel.dtype.itemsize for channel in found.channels)
        if held_byte > LARGE_BYTE:
            spool = spool or Spool(path)
            found = _put_aside(found, spool)
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


def _put_aside(contents: Contents, spool: Spool) -> Contents:
    """Return a table with its samples in a temporary file."""
    kept = (kept_in(channel.samples.read(0, len(channel.samples)), spool) for channel in contents.channels)
    channels = (replace(channel, samples=samples) for channel, samples in zip(contents.channels, kept, strict=True))
    return replace(contents, channels=tuple(channels))


def _member(data: bytes, path: Path, settings: IntakeSettings) -> Contents:
    encoding, data, form = _recognised(data, path)
    return _read(data, encoding, form, settings, path)[0]


def _kinds(contents: Contents) -> list[tuple[str, str, str]]:
    return [(channel.name, channel.role, channel.unit) for channel in contents.channels]


def _doubts(data: bytes, encoding: str, form: TextForm) -> list[str]:
    name = ENCODINGS.get(encoding)
    odd = name is not None and any(byte > 127 for byte in data[:HEAD_BYTE])
    return [*form.doubts, *([f"not UTF-8: read as {name}"] if odd else [])]


def _text(data: bytes, encoding: str) -> str:
    if encoding.startswith("utf-16") and len(data) % 2:
        data = data[:-1]
    return data.decode(encoding, "replace")


def _body(data: bytes, form: TextForm, encoding: str) -> bytes:
    """Return the rows of numbers, in UTF-8, without the lines before them."""
    if encoding.startswith("utf-16") or encoding in ENCODINGS:
        data = _text(data, encoding).encode()
    elif encoding == "utf-8-sig":
        data = data[3:]
    at = 0
    for _ in range(form.skip_lines):
        at = data.index(b"\n", at) + 1
    return data[at:]


def _lengths(columns: Columns) -> list[int]:
    """Return the length of each column without the empty cells below its last number."""
    kept = []
    for column in columns:
        finite = ~np.isnan(column)
        kept.append(len(column) if finite[-1:].all() else (int(np.flatnonzero(finite)[-1]) + 1 if finite.any() else 0))
    return kept
