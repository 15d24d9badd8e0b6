"""Compiled kernels of reading texts."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = ["single_blanks"]

BLANK, TAB, FEED, RETURN = 32, 9, 10, 13


@kernel
def single_blanks(text: npt.NDArray[np.uint8], target: npt.NDArray[np.uint8]) -> int:
    """Copy a text with one blank for every run of blanks and tabs, none at the ends of lines; return its length.

    A line ends with a line feed, with or without a return before it, or with the text.
    """
    length, is_pending, at_begin = 0, False, True
    for index in range(len(text)):
        letter = text[index]
        if letter in (BLANK, TAB):
            is_pending = True
            continue
        ends = letter == FEED or (letter == RETURN and (index + 1 == len(text) or text[index + 1] == FEED))
        if is_pending and not at_begin and not ends:
            target[length] = BLANK
            length += 1
        is_pending = False
        target[length] = letter
        length += 1
        at_begin = letter == FEED
    return length


@warm_up
def _compile() -> None:
    text = np.frombuffer(b"1  2 \n", np.uint8)
    single_blanks(text, np.empty(len(text), np.uint8))
    single_blanks(text.copy(), np.empty(len(text), np.uint8))
