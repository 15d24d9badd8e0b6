"""The form of a text file: encoding, delimiter, decimal sign, headings, units row, and where the numbers begin."""

from __future__ import annotations

import csv
import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

from meseta.intake.readers.text_cells import NUMBER, OddRows, odd_rows
from meseta.intake.roles import guess_role
from meseta.intake.units import is_unit

__all__ = ["KnownForm", "TextForm", "decode_head", "entries_of", "find_form", "known_form"]

_COMMENT: Final = re.compile(r"^\s*(#|%|//|!|\"#|;(?=\s*[A-Za-z]))+\s?")
_ENTRY: Final = re.compile(r"^([^:=\t]{1,60}?)\s*(?::|=|\t)\s*(\S.*)$")
HEAD_LINES: Final = 400
ENOUGH_LINES: Final = 12
"""So many lines of equally many numbers are the table."""
PROBE_CHARACTERS: Final = 8192
_COUNTS: Final = (["0", "1"], ["1", "2"])
ODD_RATHER: Final = 3
"""A table with words in it is taken where it has so many times the rows of what else looks like one."""


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
        return bool(self.heading) and _is_numeric(self.heading, self.delimiter, self.decimal) > 0


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
        return _is_numeric(line, self.form.delimiter, self.form.decimal) == self.form.columns


def known_form(data: bytes, form: TextForm) -> KnownForm | None:
    """Return the form to try on the next file; None where there is no heading, or a doubt, to know it again by."""
    if not form.names or form.doubts or form.kinds or form.numeric_heading:
        return None
    at = 0
    for _ in range(form.skip_lines):
        at = data.index(b"\n", at) + 1
    return KnownForm(data[:at], form)


def decode_head(data: bytes) -> str:
    """Return the name of the encoding of a text: by its mark, by the zeros of UTF-16, by being valid UTF-8."""
    if data.startswith(b"\xef\xbb\xbf"):
        return "utf-8-sig"
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        return "utf-16"
    sample = data[:2000]
    if len(sample) > 3 and sample.count(0) > len(sample) // 3:
        return "utf-16-le" if sample[1::2].count(0) > sample[0::2].count(0) else "utf-16-be"
    try:
        data[: len(data) - len(data) % 4096 or len(data)].decode("utf-8")
    except UnicodeDecodeError as error:
        if error.start < len(data) - 4:
            return "latin-1"
    return "utf-8"


def _cells(line: str, delimiter: str) -> list[str]:
    if delimiter == " ":
        return [cell.strip("\"'") for cell in line.split()]
    if '"' in line:  # a delimiter within quotes is none
        quoted = next(csv.reader([line.strip()], delimiter=delimiter, skipinitialspace=True), [])
        cells = [cell.strip() for cell in quoted]
        return cells[:-1] if len(cells) > 1 and not cells[-1] else cells
    cells = [cell.strip().strip("\"'").strip() for cell in line.split(delimiter)]
    return cells[:-1] if len(cells) > 1 and not cells[-1] else cells


def _heading_cells(line: str, delimiter: str, count: int) -> list[str]:
    """Return the cells of a line of headings; between blanks, a unit in brackets belongs to the word before it."""
    row = _cells(line, delimiter)
    if delimiter != " " or len(row) == count:
        return row
    for pattern in (r'"[^"]*"|\S+(?:\s+[\[(][^\])]*[\])])?', r'"[^"]*"|\S+(?: \S+)*'):
        found = [cell.strip("\"'") for cell in re.findall(pattern, line.replace("\t", "  "))]
        if len(found) == count:
            return found
    return row


def _is_numeric(line: str, delimiter: str, decimal: str) -> int:
    """Return the number of cells of a line of numbers; 0 where it is none."""
    cells = _cells(line, delimiter)
    if not any(cells):
        return 0
    if decimal == ",":
        if any("." in cell for cell in cells):
            return 0
        cells = [cell.replace(",", ".") for cell in cells]
    return len(cells) if all(NUMBER.match(cell) for cell in cells) else 0


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
    if best is None or best[0][0] < ENOUGH_LINES:
        odd = _odd_form(lines if len(lines) < 2 * ENOUGH_LINES else lines[:-1], text[:PROBE_CHARACTERS])
        if odd is not None and (best is None or odd[2].count > ODD_RATHER * best[0][0]):
            delimiter, decimal, rows = odd
            form = _with_headings(lines, delimiter, decimal, rows.start, len(rows.kinds), [])
            return replace(form, kinds=rows.kinds)
    if best is None:
        return None
    _, delimiter, decimal, start, cells = best
    doubts: list[str] = []
    if delimiter == "," and cells == 2 and _looks_like_decimal_comma(lines[start : start + 30]):
        delimiter, decimal, cells = ";", ",", 1
        doubts.append("one column with decimal commas, not two columns of whole numbers")
    return _with_headings(lines, delimiter, decimal, start, cells, doubts)


def _odd_form(lines: Sequence[str], probe: str) -> tuple[str, str, OddRows] | None:
    """Return (delimiter, decimal sign, rows) of a table in which not all columns are plain numbers."""
    best: tuple[tuple[int, int, int], str, str, OddRows] | None = None
    for delimiter, decimal in _candidates(probe):
        rows = [
            (number, _cells(line, delimiter))
            for number, line in enumerate(lines)
            if line.strip() and not _COMMENT.match(line)
        ]
        found = odd_rows(rows, decimal)
        if found is None:
            continue
        score = (found.count, -found.kinds.count("words"), len(found.kinds))
        if best is None or score > best[0]:
            best = (score, delimiter, decimal, found)
    return best[1:] if best else None


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
        found = 0 if not line.strip() or _COMMENT.match(line) else _is_numeric(line, delimiter, decimal)
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


def _with_headings(
    lines: Sequence[str], delimiter: str, decimal: str, start: int, cells: int, doubts: list[str]
) -> TextForm:
    before = [line for line in lines[:start] if line.strip()]
    names: list[str] = []
    units: list[str] = []
    heading, comment = "", ""
    below: list[str] = []
    for line in reversed(before):
        match = _COMMENT.match(line)
        row = _heading_cells(line[match.end() :] if match else line, delimiter, cells)
        if line is before[-1] and len(row) != cells:
            row = _fitted_row(row, cells, lines[start : start + 2], delimiter, doubts)
        if match:
            comment = comment or match[1].strip('"')
        if len(row) != cells or names:
            if not match and not names and len(row) != cells:
                continue
            if match and not names:
                continue
            break
        if not units and _is_units_row(row) and len(before) > 1 and not names:
            units = [cell.strip("[]()") if cell not in ("-", "") else "" for cell in row]
            continue
        if match and not _is_heading(row, line[match.end() :]):
            continue
        if not _is_known(row) and _better_heading(before, line, delimiter, cells):
            if not match and any(NUMBER.match(cell) for cell in row if cell):
                start = max(place for place in range(start) if lines[place] == line)  # a row with a bad cell
            below = below or row
            continue
        names, heading = row, line
        break
    before = [line for line in lines[:start] if line.strip()]
    first_numbers = _cells(lines[start], delimiter)
    if not names and len(first_numbers) > 2 and first_numbers == [str(n) for n in range(len(first_numbers))]:
        names, heading, start = [f"trace_{n}" for n in range(len(first_numbers))], lines[start], start + 1
    if not names and units:
        names, units = units, []
    numbered = _numbered(names, first_numbers)
    start += int(bool(numbered))
    above = _row_above(before, heading, delimiter, cells)
    if _labels(names, above) and _says_more(above, names):
        names, below = above, names
    labels = numbered or _labels(names, below) or _labels(names, above)
    entries = entries_of(before, heading, delimiter)
    shape = (tuple(names), tuple(units) or ("",) * cells, cells)
    form = TextForm(delimiter, decimal, start, *shape, entries, heading, comment, tuple(doubts), tuple(before))
    return replace(form, labels=labels)


def _fitted_row(row: list[str], cells: int, first: Sequence[str], delimiter: str, doubts: list[str]) -> list[str]:
    """Return the headings right above numbers where there is one too many, or none over the numbers of the rows."""
    if len(row) > cells and _is_known(row[:cells]) and not any(guess_role(one).role != "other" for one in row[cells:]):
        spare = ", ".join(f"'{one}'" for one in row[cells:])
        doubts.append(f"no numbers stand under the heading{'s' if len(row) > cells + 1 else ''} {spare}")
        return row[:cells]
    if len(row) == cells - 1 and _is_known(row) and [_cells(line, delimiter)[0] for line in first] in _COUNTS:
        return ["row", *row]
    return row


def _row_above(before: Sequence[str], heading: str, delimiter: str, cells: int) -> list[str]:
    """Return the cells of the line above the headings; an empty one says what the one before it says."""
    place = before.index(heading) if heading in before else 0
    if place == 0:
        return []
    line = before[place - 1]
    match = _COMMENT.match(line)
    row = _heading_cells(line[match.end() :] if match else line, delimiter, cells)
    row += [""] * (cells - len(row)) if len(row) == cells - 1 else []
    filled = row[:1]
    for one in row[1:]:
        filled.append(one or filled[-1])
    return filled


def _says_more(row: Sequence[str], other: Sequence[str]) -> bool:
    """Return whether a line of headings states more units than another."""
    stated = [sum(guess_role(cell).unit != "" for cell in cells) for cells in (row, other)]
    return stated[0] > stated[1]


def _labels(names: Sequence[str], row: Sequence[str]) -> tuple[str, ...]:
    """Return the traces that a second line of headings says the columns belong to; empty where it says none."""
    often = {names.count(name) for name in names}
    if len(row) != len(names) or max(often, default=1) < 2 or not often <= {1, max(often)}:
        return ()
    pairs = [(name, label) for name, label in zip(names, row, strict=True) if names.count(name) > 1]
    same = len(set(pairs)) == len(pairs) and len({label for _, label in pairs}) == max(often)
    return tuple(row) if same else ()


def _numbered(names: Sequence[str], first: Sequence[str]) -> tuple[str, ...]:
    """Return the first row where it numbers the columns under the same heading; empty where it does not."""
    for begin in (0, 1):
        wanted = [str(names[:place].count(name) + begin) for place, name in enumerate(names)]
        if list(first) == wanted and _labels(names, first):
            return tuple(first)
    return ()


def _is_known(row: Sequence[str]) -> bool:
    return all(guess_role(cell).role != "other" for cell in row)


def _better_heading(before: Sequence[str], line: str, delimiter: str, cells: int) -> bool:
    """Return whether a line further up names known quantities, so that this one ("# trace 1") is no heading."""
    above = before[: len(before) - 1 - before[::-1].index(line)]
    rows = [_heading_cells(_COMMENT.sub("", one), delimiter, cells) for one in above]
    return any(len(row) == cells and _is_known(row) for row in rows)


def _is_units_row(row: Sequence[str]) -> bool:
    filled = [cell for cell in row if cell not in ("", "-")]
    return bool(filled) and all(is_unit(cell) for cell in filled)


def _is_heading(row: Sequence[str], text: str) -> bool:
    """Return whether a comment line is the heading of the columns and not a remark."""
    if _ENTRY.match(text.strip()) and len(row) == 1 and guess_role(row[0].split(":")[0]).role == "other":
        return False
    return any(guess_role(cell).role != "other" for cell in row) or len(row) > 1


def entries_of(before: Sequence[str], heading: str, delimiter: str) -> tuple[tuple[str, str], ...]:
    """Return the "key: value" lines before the numbers, with or without a comment sign."""
    found = []
    for line in before:
        if line == heading:
            continue
        match = _COMMENT.match(line)
        text = (line[match.end() :] if match else line).strip().strip('"')
        entry = _ENTRY.match(text)
        if entry:
            found.append((entry[1].strip(), entry[2].strip().strip(delimiter).strip().strip('"')))
        elif delimiter in ",;" and text.count(delimiter) in (1, 2):
            cells = _cells(text, delimiter)
            if len(cells) >= 2 and cells[0] and cells[1]:
                found.append((cells[0], " ".join(cells[1:3]).strip()))
    return tuple(found)
