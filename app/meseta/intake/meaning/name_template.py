"""What a file name says, by a template that the user writes once: "{specimen}_{bias_mV}mV_{n}.csv"."""

from __future__ import annotations

import re
from functools import lru_cache
from pathlib import Path
from typing import Final

from meseta.errors import InputError
from meseta.intake.meaning.metadata import Plain, as_written, is_number_of

__all__ = ["from_name"]

_NUMBER: Final = r"[-+]?\d+(?:[.,p]\d+)?(?:[eE][-+]?\d+)?(?:\s?(?:[^\W\d_]|[µμΩ/])+)?"
"""A number in a name, with a unit where there is one: 100, 0p1, 1e-3, 100mV."""
_COUNT: Final = r"\d+"
_COUNTERS: Final = frozenset({"n", "nr", "no", "i", "k", "index", "number", "trace", "run", "file", "count"})


def from_name(name: str, template: str) -> tuple[dict[str, Plain], list[str]]:
    """Return what a file name says by a template, and a doubt where it can be read in two ways.

    Words of the template that stand for a number (a constant of the calibration, such as ``bias_mV``; a counter, such
    as ``n``) take nothing but a number, so that "tip_2_100mV_7.csv" fits "{specimen}_{bias_mV}mV_{n}.csv" in one way.
    No word reaches over the border of a folder.

    Raises
    ------
    InputError
        Where the name does not fit the template, or the template is not one.
    """
    for counted in (True, False):  # a counter may hold letters where it fits in no other way
        for part in dict.fromkeys((name, str(Path(name).with_suffix("")), Path(name).name, Path(name).stem)):
            first, last = (re.fullmatch(one, part) for one in _patterns(template, counted))
            if first is not None and last is not None:
                doubt = _two_ways(template, first.groupdict(), last.groupdict())
                return {word: _value(word, text) for word, text in first.groupdict().items()}, doubt
    raise InputError(f"the name does not fit the template {template}", name, "change intake.name_template")


def _value(word: str, text: str) -> Plain:
    if word.lower() in _COUNTERS and re.fullmatch(r"\d{1,18}", text):
        return int(text)
    return as_written(word, re.sub(r"(?<=\d)p(?=\d)", ".", text) if is_number_of(word) else text)


def _two_ways(template: str, first: dict[str, str], last: dict[str, str]) -> list[str]:
    differing = next((word for word in first if first[word] != last[word]), "")
    if not differing:
        return []
    return [
        f"the name fits the template {template} in more than one way: {differing} may be '{first[differing]}', "
        f"which is used, or '{last[differing]}'"
    ]


@lru_cache(maxsize=64)
def _patterns(template: str, counted: bool) -> tuple[re.Pattern[str], re.Pattern[str]]:
    """Return the template as patterns whose words reach as far as they must, and as far as they can."""
    words = re.findall(r"\{(\w+)\}", template)
    pieces = re.split(r"\{\w+\}", template)
    if not words or len(set(words)) != len(words) or any(not word.isidentifier() for word in words):
        fault = "has no words in braces" if not words else "has a word twice, or one that begins with a digit"
    elif any(set(piece) & {"{", "}"} for piece in pieces):
        fault = "has braces round something else than one word of letters, digits and _"
    elif any(not piece for piece in pieces[1:-1]):
        fault = "has two words with nothing between them"
    else:
        return _pattern(pieces, words, counted, "?"), _pattern(pieces, words, counted, "")
    raise InputError(
        f"'{template}' {fault}", "intake.name_template", "write for example {specimen}_{bias_mV}mV_{n}.csv"
    )


def _pattern(pieces: list[str], words: list[str], counted: bool, reach: str) -> re.Pattern[str]:
    pattern = re.escape(pieces[0])
    for word, piece in zip(words, pieces[1:], strict=True):
        if is_number_of(word):
            takes = _NUMBER
        else:
            takes = _COUNT if counted and word.lower() in _COUNTERS else rf"[^/\\]+{reach}"
        pattern += f"(?P<{word}>{takes}){re.escape(piece)}"
    return re.compile(pattern, re.DOTALL)
