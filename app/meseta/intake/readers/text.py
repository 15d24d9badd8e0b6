"""Text tables: comma, tab, semicolon or blanks; one trace a file, wide, long, or many traces one after the other."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.metadata import Plain, canonical
from meseta.intake.readers.contents import Contents, columns_of, make_channel, whole
from meseta.intake.readers.text_form import KnownForm, TextForm, decode_head, find_form, known_form
from meseta.intake.readers.unpack import read_bytes
from meseta.intake.recording import RawChannel
from meseta.intake.roles import guess_role, stem_of
from meseta.recipe.intake import IntakeSettings
from meseta.traces import ArraySamples

__all__ = ["TextReader"]

HEAD_BYTE: Final = 1 << 16
MANY_THREADS_BYTE: Final = 8 << 20
_NULLS: Final = ["", "nan", "NaN", "NAN", "NA", "N/A", "n/a", "null", "-", "--", "#N/A", "1.#QNAN", "-nan"]
Columns = list[npt.NDArray[np.float64]]


class TextReader:
    """Reads text tables; the form of the last one is tried first, as files of one night are written alike."""

    name = "text"

    def __init__(self) -> None:
        self._last: KnownForm | None = None

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return whether the first bytes are text; whether it holds rows of numbers shows when it is opened."""
        return bool(head) and (decode_head(head).startswith("utf-16") or b"\x00" not in head)

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Read the whole table."""
        data, sha256 = read_bytes(path)
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
    columns, lengths = _numbers(body, form, path)
    doubts = list(form.doubts)
    if encoding == "latin-1" and any(byte > 127 for byte in data[:HEAD_BYTE]):
        doubts.append("not UTF-8: read as Latin-1")
    metadata, more = canonical(form.entries, str(path))
    names = list(form.names) if form.names else [f"column {n + 1}" for n in range(form.columns)]
    units = list(form.units)
    return _laid_out(names, units, columns, lengths, settings, metadata, (*doubts, *more), path, form)


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


def _numbers(body: bytes, form: TextForm, path: Path) -> tuple[Columns, list[int]]:
    """Return the columns, and the number of rows of each block between separators.

    All rows are parsed in one go first: it succeeds, with one row a line, where no separator stands between them.
    """
    lines_before = form.skip_lines
    body = body.rstrip()
    try:
        columns = None if form.numeric_heading else _parsed(body, form, path, lines_before)
    except InputError:
        if not _has_separators(body, form):
            raise
        columns = None
    if columns is not None and len(columns[0]) == _lines(body):  # no blank line was passed over
        return _split_at_nan_rows(columns)
    blocks = _blocks(body, form)
    if len(blocks) == 1:
        return _split_at_nan_rows(_parsed(blocks[0], form, path, lines_before))
    parts, lengths = [], []
    for block in blocks:
        part = _parsed(block, form, path, lines_before)
        lines_before += block.count(b"\n") + 1
        if len(part[0]):
            parts.append(part)
            lengths.append(len(part[0]))
    if not parts:
        raise InputError("holds no rows of numbers", str(path), "give a table with numbers in rows")
    return [np.concatenate([part[place] for part in parts]) for place in range(form.columns)], lengths


def _lines(body: bytes) -> int:
    """Return the number of lines; counted by numpy, several times as fast as ``bytes.count`` where they are short."""
    return int(np.count_nonzero(np.frombuffer(body, np.uint8) == ord("\n"))) + 1


def _has_separators(body: bytes, form: TextForm) -> bool:
    """Return whether headings, remarks or blank lines stand between the rows."""
    heading, comment = form.heading.encode().strip(), form.comment.encode()
    if heading and heading in body:
        return True
    if comment and (body.startswith(comment) or b"\n" + comment in body):
        return True
    return re.search(rb"\n[ \t]*\r?\n", body) is not None


def _blocks(body: bytes, form: TextForm) -> list[bytes]:
    """Cut the rows at blank lines and at repeated headings; drop remarks between the rows."""
    heading = form.heading.encode().strip()
    if heading and heading in body:
        body = re.sub(rb"(?m)^" + re.escape(heading) + rb"[ \t]*\r?$", b"", body)
    if form.comment and b"\n" + form.comment.encode() in b"\n" + body:
        sign = re.escape(form.comment.encode())
        body = re.sub(rb"(?m)^[ \t]*" + sign + rb".*\n?", b"", body)
    return [block for block in re.split(rb"\n(?:[ \t]*\r?\n)+", body) if block.strip()]


def _split_at_nan_rows(columns: Columns) -> tuple[Columns, list[int]]:
    """Cut at rows in which every cell is NaN; such rows are separators, not samples."""
    missing = np.isnan(columns[0])
    for column in columns[1:]:
        if not missing.any():
            break
        missing &= np.isnan(column)
    if not missing.any() or missing.all():
        return columns, [len(columns[0])]
    edges = np.flatnonzero(np.diff(np.concatenate([[True], missing, [True]]).astype(np.int8)))
    lengths = (edges[1::2] - edges[0::2]).tolist()
    return [column[~missing] for column in columns], lengths


def _parsed(block: bytes, form: TextForm, path: Path, lines_before: int) -> Columns:
    import pyarrow as pa
    from pyarrow import csv

    delimiter = form.delimiter
    if delimiter == " ":
        block, delimiter = re.sub(rb"(?m)^ +| +(?=\r?$)", b"", re.sub(rb"[ \t]+", b" ", block)), " "
    first = block.split(b"\n", 1)[0].rstrip(b"\r")
    width = max(first.count(delimiter.encode()) + 1, form.columns) if form.columns > 1 else form.columns
    names = [str(place) for place in range(width)]
    reading = csv.ReadOptions(
        column_names=names,
        use_threads=len(block) > MANY_THREADS_BYTE,
        block_size=max(1 << 20, min(len(block), 1 << 26)),
    )
    kinds = dict.fromkeys(names, pa.float64())

    def table(nulls: list[str]) -> Any:
        convert = csv.ConvertOptions(column_types=kinds, null_values=nulls, decimal_point=form.decimal)
        return csv.read_csv(pa.BufferReader(block), reading, csv.ParseOptions(delimiter=delimiter), convert)

    try:
        try:
            found = table([])  # to look every cell up among the words for nothing costs a third of the time
        except pa.ArrowInvalid:
            found = table(_NULLS)
    except pa.ArrowInvalid as error:
        if str(error).startswith("Empty CSV"):
            return [np.empty(0) for _ in range(form.columns)]
        raise _in_words(error, path, lines_before) from error
    return [_array(found.column(place)) for place in range(form.columns)]


def _array(column: Any) -> npt.NDArray[np.float64]:
    """Return a column; of a single chunk without missing cells its own memory, which may not be written to."""
    one = column.chunk(0) if column.num_chunks == 1 else column
    values: npt.NDArray[np.float64] = one.to_numpy(zero_copy_only=False)
    return values


def _in_words(error: Exception, path: Path, lines_before: int) -> InputError:
    """Return the parser's complaint as one of ours, with the line in the file."""
    text = str(error)
    row = re.search(r"[Rr]ow #(\d+)", text)
    where = f"{path}, line {int(row[1]) + lines_before}" if row else str(path)
    column = re.search(r"column #(\d+)", text)
    bad = re.search(r"invalid value '(.*?)'", text, re.DOTALL)
    if bad:
        place = f" in column {int(column[1]) + 1}" if column else ""
        return InputError(f"'{bad[1][:40]}' is not a number{place}", where, "correct the cell or leave the line out")
    counts = re.search(r"Expected (\d+) columns, got (\d+)", text)
    if counts:
        return InputError(f"has {counts[2]} cells where {counts[1]} are expected", where, "correct the line")
    return InputError("is no table of numbers", where, "see the line named here")


# -- how traces stand in the columns ----------------------------------------------------------------------------------


def _laid_out(
    names: list[str],
    units: list[str],
    columns: Columns,
    lengths: list[int],
    settings: IntakeSettings,
    metadata: dict[str, Plain],
    doubts: Sequence[str],
    path: Path,
    form: TextForm,
) -> Contents:
    wide = _wide_sets(names, settings) if len(lengths) == 1 else None
    words = {"\t": "tab", " ": "blank", ",": "comma", ";": "semicolon"}[form.delimiter]
    if wide:
        return _wide(names, units, columns, wide, metadata, doubts, words)
    channels = [
        make_channel(name, ArraySamples(column), column.dtype, unit=unit, unit_ground="unit row")
        for name, unit, column in zip(names, units, columns, strict=True)
    ]
    channels = [_from_metadata(channel, metadata) if len(channels) <= 2 else channel for channel in channels]
    offsets, starts, dataset = whole(len(columns[0]))
    layout = f"{words}-separated, {len(names)} column{'s' if len(names) > 1 else ''}"
    if len(lengths) > 1:
        offsets = np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64)
        starts, dataset = offsets[:-1].copy(), np.full(len(lengths), "", np.str_)
        layout += f", {len(lengths)} blocks"
    return Contents(layout, tuple(channels), offsets, starts, dataset, metadata, {}, tuple(doubts))


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
    columns: Columns,
    sets: dict[str, list[int]],
    metadata: dict[str, Plain],
    doubts: Sequence[str],
    words: str,
) -> Contents:
    pieces = max(len(places) for places in sets.values())
    main = next(places for places in sets.values() if len(places) == pieces)
    kept = _lengths([columns[place] for place in main])
    offsets = np.concatenate([[0], np.cumsum(kept)]).astype(np.int64)
    channels = []
    for stem, places in sets.items():
        if len(places) == pieces:
            values = np.concatenate([columns[place][:n] for place, n in zip(places, kept, strict=True)])
            name, shared = stem, False
        else:
            values, name, shared = columns[places[0]], names[places[0]], True
        heading = names[places[0]]
        channel = make_channel(
            name, ArraySamples(values), values.dtype, unit=units[places[0]], unit_ground="unit row", shared=shared
        )
        if not shared and channel.role in ("other", "trace_number"):
            channel = _from_metadata(_renamed(heading, stem, values, units[places[0]]), metadata)
        channels.append(channel)
    numbers = [re.search(r"(\d+)\D*$", names[place]) for place in main]
    dataset = np.array([names[place] for place in main], np.str_)
    rows: list[dict[str, Plain]] = [{"column_number": int(found[1])} if found else {} for found in numbers]
    layout = f"{words}-separated, {pieces} traces side by side"
    starts = np.zeros(pieces, np.int64)
    return Contents(layout, tuple(channels), offsets, starts, dataset, metadata, columns_of(rows), tuple(doubts))


def _renamed(heading: str, stem: str, values: npt.NDArray[np.float64], unit: str) -> RawChannel:
    """Return a channel of numbered columns; "trace_3 (nA)" is not a trace number but a current."""
    channel = make_channel(heading, ArraySamples(values), values.dtype, unit=unit, unit_ground="unit row")
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
