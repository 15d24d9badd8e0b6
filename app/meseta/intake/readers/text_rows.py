"""The rows of numbers of a text table: parsed in one go, cut at blank lines, repeated headings and rows of NaN."""

from __future__ import annotations

import contextlib
import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from itertools import pairwise
from pathlib import Path
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.readers.text_cells import MARKS
from meseta.intake.readers.text_form import TextForm
from meseta.intake.readers.text_odd import OddColumns, bad_cell

__all__ = ["Columns", "Rows", "numbers", "numbers_of_each"]

MANY_THREADS_BYTE: Final = 8 << 20
LEAST_MARKED: Final = 2
"""In a single column of numbers a word in the place of a reading would part traces, as a row of NaN does."""
_NULLS: Final = ("", "nan", "NaN", "NAN", "NA", "N/A", "n/a", "null", "-", "--", "#N/A", "1.#QNAN", "-nan")
_MARKED: Final = re.compile("|".join(rf"'{re.escape(mark)}'" for mark in MARKS))
_NUMBER: Final = r"[-+.,]*\d[-+.,\d]*"
"""A run of digits and signs, so that two of them never touch: a line is matched in one go, whatever stands in it."""
Columns = list[npt.NDArray[np.float64]]


@dataclass(frozen=True)
class Rows:
    """Rows of a table, or of a part of one.

    Attributes
    ----------
    columns : list of (rows,) float64
    lengths : list of int
        Rows of each stretch between separators.
    opens, closes : bool
        Whether a separator stands before the first row, and behind the last.
    by_lines : bool
        Whether the separators are lines (blank ones, headings), so that rows of NaN are samples.
    """

    columns: Columns
    lengths: list[int]
    opens: bool = False
    closes: bool = False
    by_lines: bool = False
    said: tuple[tuple[str, ...], ...] = ()
    """Of each stretch, the lines before it that are like those before the first numbers."""
    left: tuple[str, ...] = ()
    """Such lines behind the last row."""


def numbers(
    body: bytes,
    form: TextForm,
    path: Path,
    lines_before: int,
    by_lines: bool = False,
    odd: OddColumns | None = None,
) -> Rows:
    """Return the rows of a text.

    All rows are parsed in one go first: it succeeds, with one row a line, where no separator stands between them.

    Parameters
    ----------
    body : bytes
        The text, from the beginning of a line to the end of one.
    form : TextForm
    path : Path
        For errors.
    lines_before : int
        Lines of the file before ``body``.
    by_lines : bool
        Whether separating lines were met before, so that rows of NaN are samples.
    odd : OddColumns, optional
        What was met before in columns that are no plain numbers; without it, a word is an error.
    """
    if odd is None:
        return _numbers(body, form, (path, lines_before), by_lines, None)
    odd.set_out()
    rows = _numbers(body, form, (path, lines_before), by_lines, odd)
    odd.count_marks(body, form.delimiter)
    return rows


def _numbers(body: bytes, form: TextForm, where: tuple[Path, int], by_lines: bool, odd: OddColumns | None) -> Rows:
    path, lines_before = where
    tail = body[len(body.rstrip()) :]
    body = body.rstrip()
    try:
        columns = None if form.numeric_heading else _parsed(body, form, path, lines_before, odd)
    except InputError:
        if not _has_separators(body, form):
            raise
        columns = None
    closes = tail.count(b"\n") > 1
    if columns is not None and len(columns[0]) == _lines(body):  # no blank line was passed over
        return (
            Rows(columns, [len(columns[0])], False, closes, True) if by_lines else _split_at_nan_rows(columns, closes)
        )
    if odd is not None:
        odd.go_back()
    cut = _cut(body, form)
    closes = closes or cut.ends
    if len(cut.blocks) == 1 and not by_lines and not cut.begins and not cut.left:
        return _split_at_nan_rows(_parsed(cut.blocks[0], form, path, lines_before, odd), closes)
    parts, lengths = _parts(cut, body, form, (path, lines_before), odd)
    said = tuple(lines for lines, length in zip(cut.said, lengths, strict=True) if length)
    lengths = [length for length in lengths if length]
    if not lengths:
        return Rows([np.empty(0) for _ in range(form.columns)], [], True, True, by_lines, left=cut.left)
    by_lines = by_lines or cut.begins or len(lengths) > 1
    return Rows(parts, lengths, cut.begins, closes, by_lines, said, cut.left)


def numbers_of_each(texts: Sequence[bytes], form: TextForm) -> list[Rows] | None:
    """Return the rows of several texts of one form, parsed in one go; each is what :func:`numbers` gives of it alone.

    Parameters
    ----------
    texts : sequence of bytes
        Without the lines before the numbers.
    form : TextForm

    Returns
    -------
    list of Rows, or None
        None where one of them is not a plain row of numbers a line: they must then be looked at one by one.
    """
    bodies = [text.rstrip() for text in texts]
    if not all(bodies) or len({_width(body, form) for body in bodies}) > 1:
        return None
    whole = b"\n".join(bodies)
    if b"\r" in whole and whole.count(b"\r") != whole.count(b"\r\n"):  # one on its own would part a line in two
        return None
    try:
        columns = _parsed(whole, form, Path(), 0)
    except InputError:
        return None
    ends = np.cumsum([_lines(body) for body in bodies]).tolist()
    if len(columns[0]) != ends[-1]:  # no line gives two rows, so that none gave none
        return None
    each = [[column[start:stop] for column in columns] for start, stop in pairwise([0, *ends])]
    if not np.isnan(columns[0]).any():
        return [Rows(own, [len(own[0])]) for own in each]
    return [_split_at_nan_rows(own, False) for own in each]


def _parts(
    cut: _Cut, body: bytes, form: TextForm, where: tuple[Path, int], odd: OddColumns | None
) -> tuple[Columns, list[int]]:
    """Return the columns of all blocks end to end, and the rows of each; parsed in one go where nothing is wrong."""
    path, lines_before = where
    lengths = [block.strip().count(b"\n") + 1 for block in cut.blocks]
    with contextlib.suppress(InputError):
        columns = _parsed(b"\n".join(block.strip() for block in cut.blocks), form, path, lines_before, odd)
        if len(columns[0]) == sum(lengths):
            return columns, lengths
    if odd is not None:
        odd.go_back()
    places = zip(cut.blocks, cut.places, strict=True)
    parts = [_parsed(block, form, path, lines_before + body.count(b"\n", 0, at), odd) for block, at in places]
    joined = [np.concatenate([part[place] for part in parts]) for place in range(form.columns)] if parts else []
    return joined, [len(part[0]) for part in parts]


def _lines(body: bytes) -> int:
    """Return the number of lines; counted by numpy, several times as fast as ``bytes.count`` where they are short."""
    return int(np.count_nonzero(np.frombuffer(body, np.uint8) == ord("\n"))) + 1


def _has_separators(body: bytes, form: TextForm) -> bool:
    """Return whether lines like those before the numbers, remarks or blank lines stand between the rows."""
    again, comment = _again(form.before), form.comment.encode()
    if again is not None and again.search(body):
        return True
    if comment and (body.startswith(comment) or b"\n" + comment in body):
        return True
    return re.search(rb"\n[ \t]*\r?\n", body) is not None


@lru_cache(maxsize=64)
def _again(before: tuple[str, ...]) -> re.Pattern[bytes] | None:
    """Return the pattern of lines like those before the first numbers: with other numbers, or other values of a key.

    A plain row of numbers is like none of them, unless it is a heading that comes again as it is.
    """
    likes = []
    for line in before:
        text = line.strip()
        entry = re.match(r"^([^:=\t,;]*[A-Za-z][^:=\t,;]*)[:=]", text)
        if entry:
            likes.append(re.escape(entry[0]) + r"[^\n]*?")
        elif re.search(r"[^\W\d_]", text) or re.fullmatch(r"[-+\d.]+", text):
            likes.append(_NUMBER.join(re.escape(part) for part in re.split(_NUMBER, text)))
        elif text:
            likes.append(re.escape(text))
    if not likes:
        return None
    return re.compile(rb"(?m)^[ \t]*(?:" + "|".join(dict.fromkeys(likes)).encode() + rb")[ \t]*\r?$")


@dataclass(frozen=True)
class _Cut:
    """Rows between separators: blocks of them, the byte at which each begins, and the lines before each."""

    blocks: list[bytes]
    places: list[int]
    said: list[tuple[str, ...]]
    begins: bool
    ends: bool
    left: tuple[str, ...]


def _cut(body: bytes, form: TextForm) -> _Cut:
    """Cut rows at blank lines and at lines like those before the first numbers; drop remarks between the rows."""
    again = _again(form.before)
    marks = (
        []
        if again is None
        else [(m.start(), m.end(), m.group().decode("utf-8", "replace")) for m in again.finditer(body)]
    )
    cut = _Cut([], [], [], False, False, ())
    said: list[str] = []
    at, begins, behind = 0, False, b""
    for start, stop, line in [*marks, (len(body), len(body), "")]:
        text = _without_remarks(body[at:start], form)
        if not cut.blocks and (at > 0 or re.match(rb"[ \t]*\r?\n", text)):
            begins = True
        for block in re.split(rb"(?:^|\n)(?:[ \t]*\r?\n)+", text):
            if block.strip():
                cut.blocks.append(block)
                cut.places.append(at + (len(body[at:start]) - len(body[at:start].lstrip())))
                cut.said.append(tuple(said))
                said = []
        if line:
            said.append(line.strip())
        at, behind = stop, text
    return replace(cut, begins=begins, ends=bool(said) or behind.endswith(b"\n"), left=tuple(said))


def _without_remarks(text: bytes, form: TextForm) -> bytes:
    if form.comment and b"\n" + form.comment.encode() in b"\n" + text:
        text = re.sub(rb"(?m)^[ \t]*" + re.escape(form.comment.encode()) + rb".*\n?", b"", text)
    return text


def _split_at_nan_rows(columns: Columns, closes: bool) -> Rows:
    """Cut at rows in which every cell is NaN; such rows are separators, not samples."""
    missing = np.isnan(columns[0])
    for column in columns[1:]:
        if not missing.any():
            break
        missing &= np.isnan(column)
    if not missing.any() or missing.all():
        return Rows(columns, [len(columns[0])], False, closes)
    edges = np.flatnonzero(np.diff(np.concatenate([[True], missing, [True]]).astype(np.int8)))
    lengths = (edges[1::2] - edges[0::2]).tolist()
    opens, closes = bool(missing[0]), closes or bool(missing[-1])
    return Rows([column[~missing] for column in columns], lengths, opens, closes)


def _width(block: bytes, form: TextForm) -> int:
    """Return the number of cells in a line, the empty one behind a last delimiter among them."""
    if form.columns == 1:
        return 1
    delimiter = form.delimiter
    line = _first_line(block).rstrip(b"\r")
    if delimiter == " ":
        line = _single_blanks(line)
    elif b'"' in line:  # a delimiter within quotes is none
        line = re.sub(rb'"[^"]*"', b"", line)
    return max(line.count(delimiter.encode()) + 1, form.columns)


def _first_line(block: bytes) -> bytes:
    end = block.find(b"\n")
    return block if end < 0 else block[:end]


@lru_cache(maxsize=64)
def _conversion(width: int, decimal: str, nulls: tuple[str, ...], odd: tuple[int, ...] = ()) -> Any:
    """Return the parser's options for so many columns of float64, and some of words."""
    import pyarrow as pa
    from pyarrow import csv

    kinds = {str(place): pa.string() if place in odd else pa.float64() for place in range(width)}
    return csv.ConvertOptions(column_types=kinds, null_values=list(nulls), decimal_point=decimal)


def _parsed(block: bytes, form: TextForm, path: Path, lines_before: int, odd: OddColumns | None = None) -> Columns:
    import pyarrow as pa
    from pyarrow import csv

    if form.delimiter == " ":
        block = _single_blanks(block)
    width = _width(block, form)
    reading = csv.ReadOptions(
        column_names=[str(place) for place in range(width)],
        use_threads=len(block) > MANY_THREADS_BYTE,
        block_size=max(1 << 20, min(len(block), 1 << 26)),
    )
    parsing = csv.ParseOptions(delimiter=form.delimiter)

    places = odd.places if odd is not None else ()
    spare = tuple(range(form.columns, width))  # what stands behind a delimiter at the ends of lines

    def table(nulls: tuple[str, ...]) -> Any:
        return csv.read_csv(
            pa.BufferReader(block), reading, parsing, _conversion(width, form.decimal, nulls, places + spare)
        )

    try:
        try:
            found = table(())  # to look every cell up among the words for nothing costs a third of the time
        except pa.ArrowInvalid:
            try:
                found = table(_NULLS)
            except pa.ArrowInvalid as error:
                if odd is None or form.columns - len(places) < LEAST_MARKED or not _MARKED.search(str(error)):
                    raise
                found = table((*_NULLS, *MARKS))
                odd.are_marks_met = True
    except pa.ArrowInvalid as error:
        first = _first_line(block)
        if re.search(rb"\d[dD][-+]?\d", first) or re.search(r"'[-+.\d]+[dD][-+]?\d+'", str(error)):
            eased = re.sub(rb"(?<=[\d.])[dD](?=[-+]?\d)", b"E", block)
            if eased != block:
                return _parsed(eased, form, path, lines_before, odd)
        if str(error).startswith("Empty CSV"):
            return [np.empty(0) for _ in range(form.columns)]
        raise _in_words(error, path, lines_before) from error
    for place in spare:
        words = [word for word in found.column(place).unique().to_pylist() if word and word.strip()]
        if words and odd is None:
            raise bad_cell(words[0], "empty", place, str(path))
        if words and odd is not None:
            odd.beyond.setdefault(words[0][:20])
    if odd is None or not places:
        return [_array(found.column(place)) for place in range(form.columns)]
    where = (str(path), lines_before)
    return [
        odd.numbers(place, found.column(place), where) if place in places else _array(found.column(place))
        for place in range(form.columns)
    ]


def _single_blanks(block: bytes) -> bytes:
    """Return a text with one blank between words, and none at the ends of lines."""
    from meseta.intake.readers.text_kernels import single_blanks

    target = np.empty(len(block), np.uint8)
    return target[: single_blanks(np.frombuffer(block, np.uint8), target)].tobytes()


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
    if bad and column:
        return bad_cell(bad[1], "a number", int(column[1]), where)
    if bad:
        return InputError(f"'{bad[1][:40]}' is not a number", where, "correct the cell or leave the line out")
    counts = re.search(r"Expected (\d+) columns, got (\d+)", text)
    if counts:
        said = f"has {counts[2]} cell{'' if counts[2] == '1' else 's'} where {counts[1]} "
        return InputError(f"{said}{'is' if counts[1] == '1' else 'are'} expected", where, "correct the line")
    return InputError("is no table of numbers", where, "see the line named here")
