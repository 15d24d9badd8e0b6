"""The table of metadata: one row a file, headed "file" and whatever else is known."""

from __future__ import annotations

import csv
from collections.abc import Sequence
from pathlib import Path
from typing import Final

from meseta.errors import InputError
from meseta.intake.meaning.metadata import Plain, as_written

__all__ = ["read_table"]

LARGEST_BYTE: Final = 1 << 28
_HEADINGS: Final = ("file", "filename", "file name", "file_name")
_WHERE: Final = "correct intake.metadata_table"
Row = dict[str, Plain]


def read_table(path: Path) -> dict[str, Row]:
    """Return the rows of a table of metadata by file name; names of folders are parted by "/".

    Cells may be parted by commas, semicolons or tabs; between semicolons and tabs numbers may have a decimal comma.

    Raises
    ------
    InputError
        Where the table cannot be read, has no column 'file', has rows of another length than its heading, or says
        different things of one file.
    """
    lines, comma = _rows(path)
    headings = [cell.strip() for cell in lines[0]] if lines else []
    place = next((n for n, cell in enumerate(headings) if cell.lower() in _HEADINGS), None)
    if place is None or len(lines) == 1:
        raise InputError("has no column 'file'" if place is None else "has no rows", str(path), _NO_FILE)
    named = [cell for cell in headings if cell]
    if len(set(named)) < len(named):
        raise InputError("has two columns of one name", f"{path}, line 1", "give each column a name of its own")
    table: dict[str, Row] = {}
    for number, cells in enumerate(lines[1:], 2):
        cells = [cell.strip() for cell in cells]
        if not any(cells):
            continue
        if any(cells[len(headings) :]) or len(cells) <= place:
            raise InputError(
                f"a row has {len(cells)} cells, the heading {len(headings)}", f"{path}, row {number}",
                "put cells that hold the delimiter in quotes; decimal commas need semicolons between cells",
            )  # fmt: skip
        name = cells[place].replace("\\", "/").removeprefix("./")
        cells[place] = ""
        row = {
            heading: as_written(heading, cell, comma=comma)
            for heading, cell in zip(headings, cells, strict=False)
            if heading and cell
        }
        if table.setdefault(name, row) != row:
            raise InputError(f"says different things of '{name}'", f"{path}, row {number}", "leave one row a file")
    return table


_NO_FILE: Final = "head the column of file names with 'file', one row a file below it"


def _rows(path: Path) -> tuple[list[list[str]], bool]:
    """Return the cells of the rows, and whether numbers may have a decimal comma."""
    try:
        if path.stat().st_size > LARGEST_BYTE:
            raise InputError("is larger than 256 MB, no table of metadata", str(path), _WHERE)
        text = _decoded(path.read_bytes())
        delimiter = max(",;\t", key=text.split("\n", 1)[0].count)
        rows: Sequence[list[str]] = list(csv.reader(text.splitlines(keepends=True), delimiter=delimiter))
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror})", str(path), _WHERE) from error
    except (ValueError, csv.Error) as error:
        raise InputError(f"cannot be read ({error})", str(path), _WHERE) from error
    return [row for row in rows if any(row)], delimiter != ","


def _decoded(data: bytes) -> str:
    if data[:2] in (b"\xff\xfe", b"\xfe\xff"):
        return data.decode("utf-16")
    if b"\x00" in data:
        raise ValueError("it holds NUL bytes and is no text")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError:
        return data.decode("cp1252", "replace")
