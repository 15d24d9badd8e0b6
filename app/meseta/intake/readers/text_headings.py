"""What stands above the numbers of a text table: headings, a row of units, names of traces, entries."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import replace
from typing import Final

from meseta.intake.meaning.roles import guess_role
from meseta.intake.meaning.units import is_unit
from meseta.intake.readers.text_cells import NUMBER
from meseta.intake.readers.text_form import COMMENT, TextForm, cells_of

__all__ = ["entries_of", "with_headings"]

_ENTRY: Final = re.compile(r"^([^:=\t]{1,60}?)\s*(?::|=|\t)\s*(\S.*)$")
_COUNTS: Final = (["0", "1"], ["1", "2"])


def with_headings(
    lines: Sequence[str], delimiter: str, decimal: str, start: int, cells: int, doubts: list[str]
) -> TextForm:
    """Return the form of a table whose numbers begin at a line, with what stands above them."""
    before = [line for line in lines[:start] if line.strip()]
    names: list[str] = []
    units: list[str] = []
    heading, comment = "", ""
    below: list[str] = []
    for line in reversed(before):
        match = COMMENT.match(line)
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
    first_numbers = cells_of(lines[start], delimiter)
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
    if len(row) == cells - 1 and _is_known(row) and [cells_of(line, delimiter)[0] for line in first] in _COUNTS:
        return ["row", *row]
    return row


def _row_above(before: Sequence[str], heading: str, delimiter: str, cells: int) -> list[str]:
    """Return the cells of the line above the headings; an empty one says what the one before it says."""
    place = before.index(heading) if heading in before else 0
    if place == 0:
        return []
    line = before[place - 1]
    match = COMMENT.match(line)
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
    rows = [_heading_cells(COMMENT.sub("", one), delimiter, cells) for one in above]
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
        match = COMMENT.match(line)
        text = (line[match.end() :] if match else line).strip().strip('"')
        entry = _ENTRY.match(text)
        if entry:
            found.append((entry[1].strip(), entry[2].strip().strip(delimiter).strip().strip('"')))
        elif delimiter in ",;" and text.count(delimiter) in (1, 2):
            cells = cells_of(text, delimiter)
            if len(cells) >= 2 and cells[0] and cells[1]:
                found.append((cells[0], " ".join(cells[1:3]).strip()))
    return tuple(found)


def _heading_cells(line: str, delimiter: str, count: int) -> list[str]:
    """Return the cells of a line of headings; between blanks, a unit in brackets belongs to the word before it."""
    row = cells_of(line, delimiter)
    if delimiter != " " or len(row) == count:
        return row
    for pattern in (r'"[^"]*"|\S+(?:\s+[\[(][^\])]*[\])])?', r'"[^"]*"|\S+(?: \S+)*'):
        found = [cell.strip("\"'") for cell in re.findall(pattern, line.replace("\t", "  "))]
        if len(found) == count:
            return found
    return row
