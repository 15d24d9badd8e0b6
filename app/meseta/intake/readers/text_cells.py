"""What the cells of a text table are: numbers, grouped digits, true and false, time stamps, words."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

__all__ = [
    "CLEARLY_GROUPED",
    "GROUPED",
    "MARKS",
    "NUMBER",
    "NUMBERS",
    "STAMP",
    "OddRows",
    "cell_kind",
    "obstacle",
    "odd_rows",
]

MARKS: Final = (
    *("None", "none", "NONE", "Overload", "OVERLOAD", "overload", "OVLD", "+OVLD", "-OVLD", "Ovld", "OVRLD"),
    *("OL", "+OL", "-OL", "O.L", "Overflow", "OVERFLOW", "overflow", "Overrange", "OVERRANGE", "overrange"),
)
"""Words in the place of a reading that an instrument did not give; they count as missing, and a doubt says how many."""
NUMBERS: Final = ("number", "grouped")
"""Kinds of columns that hold numbers."""
NUMBER: Final = re.compile(
    r"[-+]?(\d+\.?\d*|\.\d+)([eEdD][-+]?\d+)?$|[-+]?(nan|inf|infinity)$|n/?a$|null$|$|(?:"
    + "|".join(re.escape(mark) for mark in MARKS)
    + r")$",
    re.IGNORECASE,
)
GROUPED: Final = {
    ".": re.compile(r"[-+]?\d{1,3}(?:,\d{3})+(?:\.\d*)?$"),
    ",": re.compile(r"[-+]?\d{1,3}(?:\.\d{3})+(?:,\d*)?$"),
}
"""Numbers whose thousands are set apart, by the decimal sign."""
CLEARLY_GROUPED: Final = {
    ".": re.compile(r"[-+]?\d{1,3}(?:,\d{3}(?:,\d{3})+|(?:,\d{3})+\.\d*)$"),
    ",": re.compile(r"[-+]?\d{1,3}(?:\.\d{3}(?:\.\d{3})+|(?:\.\d{3})+,\d*)$"),
}
_DAY: Final = r"(?:\d{4}-\d{2}-\d{2}[T ]|\d{2}\.\d{2}\.\d{4} )"
STAMP: Final = re.compile(rf"{_DAY}?\d{{1,2}}:\d{{2}}:\d{{2}}(?:[.,]\d+)?(?:Z|[+-]\d{{2}}:?\d{{2}})?$")
"""A date (ISO 8601, or day.month.year) with the time of day, or a time of day, to the second at least."""
LEAST_ROWS: Final = 3
MOSTLY: Final = 0.8


@dataclass(frozen=True)
class OddRows:
    """Rows of a table in which not all columns are plain numbers.

    Attributes
    ----------
    start : int
        Line of the first row.
    count : int
        Rows among the lines looked at.
    kinds : tuple of str
        Of each column: "number", "grouped" (1,234.5), "truth" (true, false), "stamp" or "words".
    """

    start: int
    count: int
    kinds: tuple[str, ...]


def cell_kind(cell: str, decimal: str) -> str:
    """Return the kind of a cell; an empty one is a number that is missing."""
    if (decimal == "." or "." not in cell) and NUMBER.match(cell.replace(",", ".") if decimal == "," else cell):
        return "number"
    if GROUPED[decimal].match(cell):
        return "grouped"
    if cell.lower() in ("true", "false"):
        return "truth"
    return "stamp" if STAMP.match(cell) else "words"


def odd_rows(rows: Sequence[tuple[int, list[str]]], decimal: str) -> OddRows | None:
    """Return the rows of a table of which at least one column holds numbers; None where there are none.

    Parameters
    ----------
    rows : sequence of (line, cells)
    decimal : str
        "." or ",".
    """
    widths = Counter(len(cells) for _, cells in rows if len(cells) > 1)
    if not widths:
        return None
    width, often = widths.most_common(1)[0]
    body = [(line, [cell_kind(cell, decimal) for cell in cells], cells) for line, cells in rows if len(cells) == width]
    while body and not any(kind in NUMBERS and cell for kind, cell in zip(body[0][1], body[0][2], strict=True)):
        body = body[1:]  # headings
    if len(body) < LEAST_ROWS or 2 * often < len(rows):
        return None
    share = [sum(kinds[place] in NUMBERS for _, kinds, _ in body) / len(body) for place in range(width)]
    filled = [any(cells[place] for _, _, cells in body) for place in range(width)]
    numeric = [place for place in range(width) if share[place] >= MOSTLY and filled[place]]
    good = [numeric != [] and all(kinds[place] in NUMBERS for place in numeric) for _, kinds, _ in body]
    first = next((at for at in range(len(body) - 1) if good[at] and good[at + 1]), None)
    if first is None or sum(good) < LEAST_ROWS:
        return None
    found = [row for row, fits in zip(body, good, strict=True) if fits]
    kinds = tuple(_column_kind([row[1][place] for row in found], place in numeric) for place in range(width))
    for place, kind in enumerate(kinds):
        if kind == "grouped" and not any(CLEARLY_GROUPED[decimal].match(row[2][place]) for row in found):
            return None  # "1,234" may be one and a bit
    return OddRows(body[first][0], len(found), kinds)


def obstacle(rows: Sequence[tuple[int, list[str]]], decimal: str) -> tuple[int, int, str] | None:
    """Return (line, column, cell) of the first cell with a word in a row that has numbers too; None without one."""
    for line, cells in rows:
        kinds = [cell_kind(cell, decimal) for cell in cells]
        if any(kind == "number" and cell for kind, cell in zip(kinds, cells, strict=True)):
            return next(
                ((line, place, cells[place]) for place, kind in enumerate(kinds) if kind != "number"),
                None,
            )
    return None


def _column_kind(kinds: Sequence[str], is_numeric: bool) -> str:
    """Return the kind of a column from those of its cells."""
    if is_numeric:
        return "grouped" if "grouped" in kinds else "number"
    others = {kind for kind in kinds if kind != "number"}
    return others.pop() if len(others) == 1 and "number" not in kinds else "words"
