"""Finding the form of a text table: delimiter, decimal sign, and where the numbers begin."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import replace
from typing import Final

from meseta.intake.readers.text_cells import NUMBERS, OddRows, cell_kind, obstacle, odd_rows
from meseta.intake.readers.text_form import COMMENT, TextForm, cells_of, is_numeric
from meseta.intake.readers.text_headings import with_headings

__all__ = ["find_form", "obstacle_of"]

HEAD_LINES: Final = 400
ENOUGH_LINES: Final = 12
"""So many lines of equally many numbers are the table."""
PROBE_CHARACTERS: Final = 8192
ODD_RATHER: Final = 3
"""A table with words in it is taken where it has so many times the rows of what else looks like one."""


def find_form(text: str) -> TextForm | None:
    """Return the form of a text from its beginning; None where it holds no rows of numbers."""
    lines = [line.rstrip("\r") for line in text.split("\n", HEAD_LINES)[:HEAD_LINES]]
    best: tuple[tuple[int, ...], str, str, int, int] | None = None
    for delimiter, decimal in _candidates(text[:PROBE_CHARACTERS]):
        start, count, cells = _numeric_run(lines, delimiter, decimal)
        if not count:
            continue
        score = (count, cells, decimal == ".", delimiter in "\t;,|")
        if best is None or score > best[0]:
            best = (score, delimiter, decimal, start, cells)
    if best is None or best[0][0] < ENOUGH_LINES or _follows_a_row(lines, *best[1:]):
        odd = _odd_form(lines if len(lines) < 2 * ENOUGH_LINES else lines[:-1], text[:PROBE_CHARACTERS])
        if odd is not None and (best is None or _is_rather(odd[2], best[0][0], best[3])):
            delimiter, decimal, rows = odd
            form = with_headings(lines, delimiter, decimal, rows.start, len(rows.kinds), [])
            return replace(form, kinds=rows.kinds)
    if best is None:
        return None
    _, delimiter, decimal, start, cells = best
    doubts: list[str] = []
    if delimiter == "," and cells == 2 and _looks_like_decimal_comma(lines[start : start + 30]):
        delimiter, decimal, cells = ";", ",", 1
        doubts.append("one column with decimal commas, not two columns of whole numbers")
    if decimal == "," and _may_be_thousands(lines[start:], delimiter):
        doubts.append("commas are taken as decimal commas (1,234 is 1.234), though they could part thousands")
    return with_headings(lines, delimiter, decimal, start, cells, doubts)


def _follows_a_row(lines: Sequence[str], delimiter: str, decimal: str, start: int, cells: int) -> bool:
    """Return whether the line above plain numbers has as many cells, and a number among them."""
    above = cells_of(lines[start - 1], delimiter) if start else []
    return len(above) == cells > 1 and any(cell and cell_kind(cell, decimal) in NUMBERS for cell in above)


def _is_rather(odd: OddRows, plain_rows: int, start: int) -> bool:
    """Return whether odd rows are the table, and the plain ones found only a part of it."""
    return odd.count > ODD_RATHER * plain_rows or (odd.start < start and "words" not in odd.kinds)


def _may_be_thousands(lines: Sequence[str], delimiter: str) -> bool:
    """Return whether each comma has one to three digits before it, no nought alone, and three behind it."""
    cells = [cell for line in lines for cell in cells_of(line, delimiter) if "," in cell]
    return bool(cells) and all(re.fullmatch(r"[-+]?[1-9]\d{0,2},\d{3}", cell) for cell in cells)


def _odd_form(lines: Sequence[str], probe: str) -> tuple[str, str, OddRows] | None:
    """Return (delimiter, decimal sign, rows) of a table in which not all columns are plain numbers."""
    best: tuple[tuple[int, int, int], str, str, OddRows] | None = None
    for delimiter, decimal in _candidates(probe):
        found = odd_rows(_rows_of_cells(lines, delimiter), decimal)
        if found is None:
            continue
        score = (found.count, sum(kind in NUMBERS for kind in found.kinds), -found.kinds.count("words"))
        if best is None or score > best[0]:
            best = (score, delimiter, decimal, found)
    return best[1:] if best else None


def _rows_of_cells(lines: Sequence[str], delimiter: str) -> list[tuple[int, list[str]]]:
    """Return (line, cells) of the lines that are neither empty nor remarks."""
    filled = [(number, line) for number, line in enumerate(lines) if line.strip() and not COMMENT.match(line)]
    return [(number, cells_of(line, delimiter)) for number, line in filled]


def obstacle_of(text: str) -> tuple[int, int, str] | None:
    """Return (line, column, cell), counted from 1, of what keeps a text from being a table of numbers; or None."""
    lines = [line.rstrip("\r") for line in text.split("\n", HEAD_LINES)[:HEAD_LINES]]
    best: tuple[int, tuple[int, int, str]] | None = None
    for delimiter, decimal in _candidates(text[:PROBE_CHARACTERS]):
        rows = _rows_of_cells(lines, delimiter)
        widths = [len(cells) for _, cells in rows if len(cells) > 1]
        usual = max(set(widths), key=widths.count, default=0)
        found = obstacle([row for row in rows if len(row[1]) == usual], decimal)
        if found is not None and (best is None or widths.count(usual) * usual > best[0]):
            best = (widths.count(usual) * usual, (found[0] + 1, found[1] + 1, found[2]))
    return None if best is None else best[1]


def _candidates(text: str) -> list[tuple[str, str]]:
    """Return the pairs of delimiter and decimal sign that a text can be written with."""
    found = [(sign, ".") for sign in "\t;,|" if sign in text]
    blanks = " " in text or not found
    if blanks:
        found.append((" ", "."))
    if "," in text:
        found += [(sign, ",") for sign in "\t;|" if sign in text] + ([(" ", ",")] if blanks else [])
    return found


def _numeric_run(lines: Sequence[str], delimiter: str, decimal: str) -> tuple[int, int, int]:
    """Return (first line, lines, cells a line) of the first long run of lines with equally many numbers."""
    best = (0, 0, 0)
    start, count, cells = 0, 0, 0
    for number, line in enumerate(lines):
        found = 0 if not line.strip() or COMMENT.match(line) else is_numeric(line, delimiter, decimal)
        if found and found == cells:
            count += 1
        elif not line.strip() and count:
            continue
        else:
            start, count, cells = number, int(found > 0), found
        if count >= ENOUGH_LINES:
            return start, count, cells
        if count > best[1] and (best[2] != cells or best[1] == 0 or start == best[0]):
            best = (start, count, cells)
    return best


def _looks_like_decimal_comma(lines: Sequence[str]) -> bool:
    parts = [line.strip().split(",") for line in lines if line.count(",") == 1]
    if not parts or not all(part.lstrip("-+").isdigit() for pair in parts for part in pair):
        return False
    return any(pair[1].startswith("0") and len(pair[1]) > 1 for pair in parts)
