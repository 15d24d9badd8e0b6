"""Recordings that are too large to be held in memory are refused before any of it is taken."""

from __future__ import annotations

import os
from typing import Final

from meseta import typeset
from meseta.errors import InputError

__all__ = ["TooLargeError", "check_room", "machine_byte"]

MOST_SHARE: Final = 0.6
"""Share of the machine's memory that traces may take: the analysis, the system and other programs need the rest."""


class TooLargeError(InputError):
    """Traces would take more memory than the machine has to spare."""


def machine_byte() -> int | None:
    """Return the memory of the machine in bytes; None where the system does not say."""
    try:
        return os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES")
    except (AttributeError, ValueError, OSError):
        return None


def check_room(needed_byte: int, where: str) -> None:
    """Refuse to load what would take most of the machine's memory.

    Raises
    ------
    TooLargeError
        With the way round it: a study is worked through block by block, whatever its size.
    """
    there = machine_byte()
    if there is not None and needed_byte > MOST_SHARE * there:
        raise TooLargeError(
            f"the traces would take {typeset.number(needed_byte / 1e9, 3)} GB of this machine's "
            f"{typeset.number(there / 1e9, 3)} GB of memory",
            where,
            "gather it into a study, which is worked through block by block: meseta gather FILES --into STUDY, then "
            "meseta run STUDY",
        )
