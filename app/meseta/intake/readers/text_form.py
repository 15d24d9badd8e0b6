"""The form of a text table: how its cells, headings and entries are written."""

from __future__ import annotations

import csv
import re
from dataclasses import dataclass
from typing import Final

from meseta.intake.readers.text_cells import NUMBER

__all__ = ["COMMENT", "KnownForm", "TextForm", "cells_of", "is_numeric", "known_form"]

COMMENT: Final = re.compile(r"^\s*(#|%|//|!|\"#|;(?=\s*[A-Za-z]))+\s?")
"""What begins a remark."""


@dataclass(frozen=True)
class TextForm:
    """How a text file is written.

    Attributes
    ----------
    delimiter : str
        One character; " " stands for any run of blanks.
    decimal : str
        "." or ",".
    skip_lines : int
        Lines before the numbers.
    names : tuple of str
        Headings of the columns; empty where there are none.
    units : tuple of str
        Units row; empty strings where a column has none.
    columns : int
    entries : tuple of (str, str)
        "key: value" lines before the numbers.
    heading : str
        The heading line itself, which may come again before each trace.
    comment : str
        The comment sign, where there are comments.
    doubts : tuple of str
    """

    delimiter: str
    decimal: str
    skip_lines: int
    names: tuple[str, ...]
    units: tuple[str, ...]
    columns: int
    entries: tuple[tuple[str, str], ...] = ()
    heading: str = ""
    comment: str = ""
    doubts: tuple[str, ...] = ()
    before: tuple[str, ...] = ()
    """Lines before the numbers, as they stand there; before each further trace they may come again."""
    kinds: tuple[str, ...] = ()
    """What each column holds where not all are plain numbers; see :class:`meseta.intake.readers.text_cells.OddRows`."""
    labels: tuple[str, ...] = ()
    """Of each column, the name of the trace that it belongs to, where a second line of headings says it."""

    @property
    def numeric_heading(self) -> bool:
        """Whether the heading is a row of numbers, which the rows cannot be told from."""
        return bool(self.heading) and is_numeric(self.heading, self.delimiter, self.decimal) > 0


@dataclass(frozen=True)
class KnownForm:
    """The form of a file, and the bytes that stood before its numbers."""

    before: bytes
    form: TextForm

    def fits(self, data: bytes) -> bool:
        """Return whether another file begins with the same bytes and then with such a row of numbers."""
        if not data.startswith(self.before):
            return False
        begin = len(self.before)
        stop = data.find(b"\n", begin)
        line = data[begin : stop if stop >= 0 else len(data)].decode("latin-1").rstrip("\r")
        return is_numeric(line, self.form.delimiter, self.form.decimal) == self.form.columns


def known_form(data: bytes, form: TextForm) -> KnownForm | None:
    """Return the form to try on the next file; None where there is no heading, or a doubt, to know it again by."""
    if not form.names or form.doubts or form.kinds or form.numeric_heading:
        return None
    at = 0
    for _ in range(form.skip_lines):
        at = data.index(b"\n", at) + 1
    return KnownForm(data[:at], form)


def cells_of(line: str, delimiter: str) -> list[str]:
    """Return the cells of a line without the empty one behind a last delimiter."""
    if delimiter == " ":
        return [cell.strip("\"'") for cell in line.split()]
    if '"' in line:  # a delimiter within quotes is none
        quoted = next(csv.reader([line.strip()], delimiter=delimiter, skipinitialspace=True), [])
        cells = [cell.strip() for cell in quoted]
        return cells[:-1] if len(cells) > 1 and not cells[-1] else cells
    cells = [cell.strip().strip("\"'").strip() for cell in line.split(delimiter)]
    return cells[:-1] if len(cells) > 1 and not cells[-1] else cells


def is_numeric(line: str, delimiter: str, decimal: str) -> int:
    """Return the number of cells of a line of numbers; 0 where it is none."""
    cells = cells_of(line, delimiter)
    if not any(cells):
        return 0
    if decimal == ",":
        if any("." in cell for cell in cells):
            return 0
        cells = [cell.replace(",", ".") for cell in cells]
    return len(cells) if all(NUMBER.match(cell) for cell in cells) else 0
