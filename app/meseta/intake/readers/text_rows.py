"""The rows of numbers of a text table: parsed in one go, cut at blank lines, repeated headings and rows of NaN."""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.readers.text_form import TextForm

__all__ = ["Columns", "Rows", "numbers"]

MANY_THREADS_BYTE: Final = 8 << 20
_NULLS: Final = ["", "nan", "NaN", "NAN", "NA", "N/A", "n/a", "null", "-", "--", "#N/A", "1.#QNAN", "-nan"]
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


def numbers(body: bytes, form: TextForm, path: Path, lines_before: int, by_lines: bool = False) -> Rows:
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
    """
    tail = body[len(body.rstrip()) :]
    body = body.rstrip()
    try:
        columns = None if form.numeric_heading else _parsed(body, form, path, lines_before)
    except InputError:
        if not _has_separators(body, form):
            raise
        columns = None
    closes = tail.count(b"\n") > 1
    if columns is not None and len(columns[0]) == _lines(body):  # no blank line was passed over
        return (
            Rows(columns, [len(columns[0])], False, closes, True) if by_lines else _split_at_nan_rows(columns, closes)
        )
    blocks, opens, ends = _blocks(body, form)
    closes = closes or ends
    if len(blocks) == 1 and not by_lines and not opens:
        return _split_at_nan_rows(_parsed(blocks[0], form, path, lines_before), closes)
    parts, lengths = [], []
    for block in blocks:
        part = _parsed(block, form, path, lines_before)
        lines_before += block.count(b"\n") + 1
        if len(part[0]):
            parts.append(part)
            lengths.append(len(part[0]))
    if not parts:
        return Rows([np.empty(0) for _ in range(form.columns)], [], True, True, by_lines)
    columns = [np.concatenate([part[place] for part in parts]) for place in range(form.columns)]
    return Rows(columns, lengths, opens, closes, by_lines or opens or len(parts) > 1)


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


def _blocks(body: bytes, form: TextForm) -> tuple[list[bytes], bool, bool]:
    """Cut the rows at blank lines and repeated headings, drop remarks; say whether it begins and ends with a cut."""
    heading = form.heading.encode().strip()
    if heading and heading in body:
        body = re.sub(rb"(?m)^" + re.escape(heading) + rb"[ \t]*\r?$", b"", body)
    if form.comment and b"\n" + form.comment.encode() in b"\n" + body:
        sign = re.escape(form.comment.encode())
        body = re.sub(rb"(?m)^[ \t]*" + sign + rb".*\n?", b"", body)
    begins = re.match(rb"[ \t]*\r?\n", body) is not None
    return (
        [block for block in re.split(rb"(?:^|\n)(?:[ \t]*\r?\n)+", body) if block.strip()],
        begins,
        body.endswith(b"\n"),
    )


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
