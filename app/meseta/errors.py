"""Errors that tell a user what is wrong, where, and what to do about it.

Every error that reaches a user is a :class:`MesetaError`.  Its text is one line; its kind decides the exit
code of the command line.  Anything else that escapes is a defect of Meseta and is reported as such.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable

__all__ = [
    "CallError",
    "Cancelled",
    "InputError",
    "MesetaError",
    "OutputError",
    "RecipeError",
    "StudyError",
    "WorkError",
    "nearest",
    "printable",
]


def printable(text: object) -> str:
    r"""Return a text that any file and terminal takes: bytes of a file name that are no UTF-8 stand as ``\udcff``."""
    return str(text).encode("utf-8", "backslashreplace").decode()


class MesetaError(Exception):
    """One clear statement: what is wrong, where, and what to do.

    Parameters
    ----------
    what : str
        The fault, in the user's terms.
    where : str
        File, dataset, line, setting or trace concerned; empty where there is none.
    remedy : str
        What the user can do about it; empty where nothing can be proposed.
    """

    exit_code = 1

    def __init__(self, what: str, where: str = "", remedy: str = "") -> None:
        super().__init__(what, where, remedy)
        self.what, self.where, self.remedy = (" ".join(printable(part).split()) for part in (what, where, remedy))

    def __str__(self) -> str:
        text = f"{self.where}: {self.what}" if self.where else self.what
        return f"{text} -> {self.remedy}" if self.remedy else text


class CallError(MesetaError):
    """The call itself is wrong: an unknown option, a value out of range."""

    exit_code = 2


class RecipeError(MesetaError):
    """A setting has an unknown name or a value that is not allowed."""

    exit_code = 2


class InputError(MesetaError):
    """A file is missing, unreadable, damaged or of no known layout."""

    exit_code = 2


class OutputError(MesetaError):
    """The output folder or file cannot be used."""

    exit_code = 2


class StudyError(MesetaError):
    """A study file is damaged, locked, or written by a newer version."""

    exit_code = 2


class WorkError(MesetaError):
    """Work that had begun could not be finished."""

    exit_code = 1


class Cancelled(MesetaError):
    """The user stopped the work; nothing was changed."""

    exit_code = 130

    def __init__(self) -> None:
        super().__init__("stopped on request; nothing was changed")


def nearest(word: str, known: Iterable[str], most: int = 3) -> str:
    """Name the known words closest to a mistyped one, as the remedy of an error.

    Returns
    -------
    str
        ``"did you mean 'a' or 'b'?"``, or the list of known words where none is close.
    """
    names = list(known)
    close = difflib.get_close_matches(word, names, n=most, cutoff=0.6)
    if close:
        return "did you mean " + " or ".join(f"'{name}'" for name in close) + "?"
    shown = names if len(names) <= 12 else [*names[:12], "..."]
    return "known: " + ", ".join(shown) if names else ""
