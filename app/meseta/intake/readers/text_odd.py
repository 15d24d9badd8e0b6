"""Columns of a text that are no plain numbers, as numbers: true and false, time stamps, grouped digits, words."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.readers.text_cells import MARKS

__all__ = ["BadCellError", "OddColumns", "bad_cell"]

MOST_WORDS: Final = 10_000
SHOWN_WORDS: Final = 4
_ZONE: Final = r"(?:Z|[+-]\d{2}:?\d{2})$"
DAY_NS: Final = 86_400_000_000_000
Floats = npt.NDArray[np.float64]


class BadCellError(InputError):
    """A cell that is not what its column holds; ``column`` counts from 0, ``word`` is what stands in it."""

    column = -1
    word = ""


def bad_cell(word: str, kind: str, column: int, where: str) -> BadCellError:
    """Return the error of a cell that is not of its column's kind."""
    error = BadCellError(
        f"'{word[:40]}' is not {kind} in column {column + 1}", where, "correct the cell or leave the line out"
    )
    error.column, error.word = column, word
    return error


@dataclass
class OddColumns:
    """What is known of the odd columns of one text while it is read, block after block.

    Attributes
    ----------
    kinds : tuple of str
        Of each column; see :class:`meseta.intake.readers.text_cells.OddRows`.  Empty where all are plain numbers.
    decimal : str
        "." or ",".
    marked : dict
        Word in the place of a reading -> how often.
    are_marks_met : bool
        Whether such words were met in the rows that are parsed at present, and are not counted yet.
    beyond : dict
        What stands here and there behind the last column.
    """

    kinds: tuple[str, ...]
    decimal: str
    marked: dict[str, int] = field(default_factory=dict)
    are_marks_met: bool = False
    beyond: dict[str, None] = field(default_factory=dict)
    _codes: dict[int, dict[str, int]] = field(default_factory=dict)
    _rows: int = 0
    _first: dict[int, tuple[int, str]] = field(default_factory=dict)
    _last: dict[int, int] = field(default_factory=dict)
    _before: dict[int, int] = field(default_factory=dict)

    def set_out(self) -> None:
        """Remember what the next rows follow, before they are parsed."""
        self._before = dict(self._last)

    def go_back(self) -> None:
        """Forget the rows that were parsed last: they are parsed again."""
        self._last = dict(self._before)

    @property
    def places(self) -> tuple[int, ...]:
        """Columns that are no plain numbers."""
        return tuple(place for place, kind in enumerate(self.kinds) if kind != "number")

    def numbers(self, place: int, column: Any, where: Sequence[str | int]) -> Floats:
        """(rows,) float64, the numbers that a column of words stands for; NaN where a cell is empty.

        Raises
        ------
        BadCellError
            Where a cell is not of the column's kind; ``where`` is the file and the line before the first row.
        """
        import pyarrow as pa
        import pyarrow.compute as pc

        words = pc.utf8_trim_whitespace(column.combine_chunks() if isinstance(column, pa.ChunkedArray) else column)
        kind = self.kinds[place]
        if kind == "words":
            return self._coded(place, words)
        missing = np.asarray(pc.equal(words, "").to_numpy(zero_copy_only=False), np.bool_)
        if kind == "truth":
            lowered = pc.utf8_lower(words)
            true = np.asarray(pc.equal(lowered, "true").to_numpy(zero_copy_only=False), np.bool_)
            false = np.asarray(pc.equal(lowered, "false").to_numpy(zero_copy_only=False), np.bool_)
            self._check(~(true | false | missing), words, "true or false", place, where)
            return np.where(missing, np.nan, true.astype(np.float64))
        if kind == "grouped":
            return self._grouped(place, words, missing, where)
        return self._seconds(place, words, missing, where)

    def _check(
        self, wrong: npt.NDArray[np.bool_], words: Any, kind: str, place: int, where: Sequence[str | int]
    ) -> None:
        if wrong.any():
            row = int(np.argmax(wrong))
            raise bad_cell(str(words[row]), kind, place, f"{where[0]}, line {int(where[1]) + row + 1}")

    def _coded(self, place: int, words: Any) -> Floats:
        """Return a number for each word, counted from 0 in the order in which they come."""
        known = self._codes.setdefault(place, {})
        self._rows = max(self._rows, len(words))
        if len(known) > MOST_WORDS:  # it is left out
            return np.full(len(words), np.nan)
        coded = words.dictionary_encode()
        codes = np.array([known.setdefault(str(word), len(known)) for word in coded.dictionary.to_pylist()], np.float64)
        return codes[coded.indices.to_numpy(zero_copy_only=False)] if len(codes) else np.empty(0)

    def _grouped(self, place: int, words: Any, missing: npt.NDArray[np.bool_], where: Sequence[str | int]) -> Floats:
        import pyarrow as pa
        import pyarrow.compute as pc

        sign = "," if self.decimal == "." else "."
        digits = r"\d{1,3}(?:" + re.escape(sign) + r"\d{3})+"
        rest = r"(?:" + re.escape(self.decimal) + r"\d*)?"
        plain = r"(?:\d+" + rest + r"|" + re.escape(self.decimal) + r"\d+)(?:[eE][-+]?\d+)?"
        fits = pc.match_substring_regex(words, f"^(?:[-+]?(?:{digits}{rest}|{plain})|[-+]?(?i:nan|inf))$")
        self._check(~(np.asarray(fits.to_numpy(zero_copy_only=False)) | missing), words, "a number", place, where)
        words = pc.replace_substring(pc.replace_substring(words, sign, ""), self.decimal, ".")
        words = pc.if_else(pa.array(missing), "nan", words)
        values: Floats = pc.cast(words, pa.float64()).to_numpy(zero_copy_only=False)
        return values

    def _seconds(self, place: int, words: Any, missing: npt.NDArray[np.bool_], where: Sequence[str | int]) -> Floats:
        """Return the seconds from the first stamp on; a time of day that falls by half a day went on into the next."""
        import pyarrow as pa
        import pyarrow.compute as pc

        example = next((str(word) for word in words.to_pylist() if str(word)), "")
        zone = re.search(_ZONE, example)
        is_clock = re.match(r"\d{1,2}:", example) is not None
        text = pc.replace_substring_regex(words, f"{re.escape(zone[0])}$", "") if zone else words
        text = pc.replace_substring(text, ",", ".")
        text = pc.replace_substring_regex(text, r"^(\d{2})\.(\d{2})\.(\d{4}) ", r"\3-\2-\1 ")
        if is_clock:
            text = pc.binary_join_element_wise("1970-01-01", text, " ")
        text = pc.replace_substring_regex(text, r"^(.{10}[T ])(\d):", r"\10\2:")  # a zero behind group 1
        text = pc.if_else(pa.array(missing), pa.scalar(None, pa.string()), text)
        fits = pc.match_substring_regex(text, r"^\d{4}-\d{2}-\d{2}[T ]\d{2}:\d{2}:\d{2}(\.\d{1,9})?$")
        known = np.asarray(pc.fill_null(fits, True).to_numpy(zero_copy_only=False), np.bool_)
        self._check(~known, words, "a time stamp like the others", place, where)
        try:
            stamps = pc.cast(text, pa.timestamp("ns"))
        except pa.ArrowInvalid as error:
            bad = re.search(r"'([^']*)'", str(error))
            raise bad_cell(bad[1] if bad else "", "a time stamp", place, str(where[0])) from error
        elapsed = np.asarray(pc.fill_null(pc.cast(stamps, pa.int64()), 0).to_numpy(zero_copy_only=False), np.int64)
        there = np.flatnonzero(~missing)
        if len(there) == 0:
            return np.full(len(elapsed), np.nan)
        shown = elapsed[there].copy()
        if is_clock:
            before = self._last.get(place, int(shown[0]))
            steps = np.diff(shown, prepend=before % DAY_NS)
            shown += (before // DAY_NS + np.cumsum(steps < -DAY_NS // 2)) * DAY_NS
            self._last[place] = int(shown[-1])
        first, _ = self._first.setdefault(place, (int(shown[0]), str(words[int(there[0])])))
        seconds = np.full(len(elapsed), np.nan)
        seconds[there] = (shown - first) / 1e9
        return seconds

    def words(self, place: int, codes: Floats) -> list[str]:
        """Return the words of the rows of a column."""
        known = list(self._codes.get(place, {}))
        return [known[int(code)] for code in codes.tolist()]

    def constant(self, place: int) -> str | None:
        """Return the only word of a column of words; None where there are several."""
        words = list(self._codes.get(place, {})) if self.kinds and self.kinds[place] == "words" else []
        return words[0] if len(words) == 1 else None

    def is_left_out(self, place: int) -> bool:
        """Return whether a column holds nothing to carry: one word in every row, or words as different as prose."""
        words = self._codes.get(place, {})
        return len(words) == 1 or len(words) > MOST_WORDS or len(words) > max(self._rows / 2, 16)

    def said_of(self, place: int, name: str) -> str:
        """Return in words what was made of an odd column."""
        kind, sign = self.kinds[place], "," if self.decimal == "." else "."
        if kind == "truth":
            return f"'{name}' holds true and false: carried as 1 and 0"
        if kind == "grouped":
            return f"'{sign}' within the numbers of '{name}' is taken as the sign between thousands"
        if kind == "stamp":
            first = self._first.get(place, (0, "no stamp"))[1]
            return f"'{name}' holds time stamps: taken as seconds from the first, {first}"
        words = list(self._codes.get(place, {}))
        shown = ", ".join(f"'{word[:20]}'" for word in words[:SHOWN_WORDS])
        shown += f" and {len(words) - SHOWN_WORDS} more" if len(words) > SHOWN_WORDS else ""
        if len(words) == 1:
            return f"'{name}' is {shown or 'empty'} in every row: kept as a word of the file, not as a channel"
        if self.is_left_out(place):
            return f"'{name}' holds words ({shown}): left out"
        return f"'{name}' holds words: carried as numbers from 0 on, in the order in which they come ({shown})"

    def count_marks(self, text: bytes, delimiter: str) -> None:
        """Count the words in the place of readings."""
        if not self.are_marks_met:
            return
        self.are_marks_met = False
        sign = r"[ \t]" if delimiter == " " else re.escape(delimiter)
        cell = rf"(?m)(?:^|(?<={sign}))[ \"]*({'|'.join(re.escape(mark) for mark in MARKS)})[ \"]*(?={sign}|\r?$)"
        for found in re.findall(cell.encode(), text):
            word = found.decode()
            self.marked[word] = self.marked.get(word, 0) + 1

    @property
    def is_any(self) -> bool:
        """Whether there is anything to say."""
        return bool(self.kinds or self.marked or self.beyond)

    def doubts(self) -> list[str]:
        """Return in words how many cells hold a word in the place of a reading, and what is left out at the ends."""
        left = ", ".join(f"'{word}'" for word in list(self.beyond)[:SHOWN_WORDS])
        beyond = [f"a few cells stand behind the last column ({left}): left out"] if left else []
        return beyond + [
            f"{count} cell{'s' if count > 1 else ''} '{word}' in the place of a number: taken as missing"
            for word, count in self.marked.items()
        ]
