"""Large texts: parsed block by block, their numbers put aside, so that memory stays small whatever the size."""

from __future__ import annotations

import codecs
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Final

from meseta.errors import InputError
from meseta.intake.readers.spool import SpooledColumns
from meseta.intake.readers.text_form import TextForm
from meseta.intake.readers.text_odd import OddColumns
from meseta.intake.readers.text_rows import Rows, numbers
from meseta.intake.readers.unpack import unpacked_blocks

__all__ = ["Stretches", "put_aside"]

BLOCK_BYTE: Final = 4 << 20
LONGEST_LINE_BYTE: Final = 64 << 20


@dataclass
class Stretches:
    """Rows of each stretch between separators, and the lines before it that are like those before the first one."""

    lengths: list[int] = field(default_factory=list)
    said: list[tuple[str, ...]] = field(default_factory=list)
    _left: tuple[str, ...] = ()

    def add(self, rows: Rows, begins: bool) -> None:
        """Count further rows; the first stretch goes on with the one before unless something separates them."""
        if not rows.lengths:
            self._left += rows.left
            return
        said = list(rows.said) or [()] * len(rows.lengths)
        said[0] = (*self._left, *said[0])
        self._left = rows.left
        first = 0
        if self.lengths and not begins:
            self.lengths[-1] += rows.lengths[0]
            first = 1
        self.lengths += rows.lengths[first:]
        self.said += said[first:]


def put_aside(
    path: Path, form: TextForm, encoding: str, odd: OddColumns | None = None
) -> tuple[SpooledColumns, Stretches]:
    """Return the columns of a text table, put aside, and its stretches of rows.

    Raises
    ------
    InputError
        Where a line is no row of numbers, or there is no room.
    """
    columns, stretches = SpooledColumns(path, form.columns), Stretches()
    lines_before, begins, by_lines = form.skip_lines, True, False
    for text in _whole_lines(path, encoding, form.skip_lines):
        rows = numbers(text, form, path, lines_before, by_lines, odd)
        lines_before += text.count(b"\n")
        stretches.add(rows, begins or rows.opens)
        begins, by_lines = rows.closes, rows.by_lines
        columns.add(rows.columns)
    if not stretches.lengths:
        raise InputError("holds no rows of numbers", str(path), "give a table with numbers in rows")
    return columns, stretches


def _whole_lines(path: Path, encoding: str, skip_lines: int) -> Iterator[bytes]:
    """Yield the text behind the first lines in UTF-8, in blocks of whole lines."""
    rest = b""
    for block in _in_utf8(path, encoding):
        rest += block
        end = rest.rfind(b"\n") + 1
        if end == 0:
            if len(rest) > LONGEST_LINE_BYTE:
                raise InputError("holds a line beyond reason", str(path), "give a table with numbers in rows")
            continue
        text, rest = rest[:end], rest[end:]
        while skip_lines and text:
            text, skip_lines = text[text.find(b"\n") + 1 :], skip_lines - 1
        if text:
            yield text
    if rest.strip() and not skip_lines:
        yield rest


def _in_utf8(path: Path, encoding: str) -> Iterator[bytes]:
    """Yield the blocks of a text with line feeds at the ends of lines."""
    decoder = None if encoding.startswith("utf-8") else codecs.getincrementaldecoder(encoding)("replace")
    is_first, lone_returns = True, False
    for raw in unpacked_blocks(path, BLOCK_BYTE):
        block = decoder.decode(raw).encode() if decoder else raw
        if is_first:
            block = block.removeprefix(codecs.BOM_UTF8)
            head = block[: 1 << 16]
            is_first, lone_returns = False, b"\r" in head and b"\n" not in head
        yield block.replace(b"\r", b"\n") if lone_returns else block
