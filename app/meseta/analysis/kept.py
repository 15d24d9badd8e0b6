"""Results kept by key, so that undo is no work: the last ones used, as many as memory has room for."""

from __future__ import annotations

import mmap
import threading
from collections import OrderedDict
from collections.abc import Iterator, Mapping
from dataclasses import fields, is_dataclass
from typing import Any

import numpy as np

__all__ = ["KeptResults", "array_owners"]

_MOST_A_STEP = 8
_MOST_BYTES = 1 << 30


class KeptResults:
    """Results by step and key; shared by all analyses made from one another.

    At most 8 results a step, and of all steps together at most about 1 GB of arrays: beyond that the results used
    longest ago go, but never the last one of a step.  Arrays that lie in a file count nothing, and arrays that several
    results share count once.
    """

    def __init__(self, most_bytes: int = _MOST_BYTES, most_a_step: int = _MOST_A_STEP) -> None:
        self._most_bytes, self._most_a_step, self._lock = most_bytes, most_a_step, threading.Lock()
        self._results: OrderedDict[tuple[str, str], Any] = OrderedDict()
        self._owners: dict[tuple[str, str], dict[int, int]] = {}

    def get(self, step: str, key: str) -> Any:
        """Return a result, or None where it is not at hand."""
        with self._lock:
            if (step, key) in self._results:
                self._results.move_to_end((step, key))
            return self._results.get((step, key))

    def put(self, step: str, key: str, result: Any) -> None:
        """Keep a result, and let go of what there is no more room for."""
        owners = dict(array_owners(result))
        with self._lock:
            self._results[step, key] = result
            self._results.move_to_end((step, key))
            self._owners[step, key] = owners
            of_step = [place for place in self._results if place[0] == step]
            for place in of_step[: -self._most_a_step]:
                self._drop(place)
            while self._bytes() > self._most_bytes and (spare := self._spare()):
                self._drop(spare)

    def _bytes(self) -> int:
        together: dict[int, int] = {}
        for owners in self._owners.values():
            together |= owners
        return sum(together.values())

    def _spare(self) -> tuple[str, str] | None:
        """Return the result used longest ago of a step that has others."""
        latest = {place[0]: place for place in self._results}
        return next((place for place in self._results if latest[place[0]] != place and self._owners[place]), None)

    def _drop(self, place: tuple[str, str]) -> None:
        del self._results[place], self._owners[place]


def array_owners(value: Any) -> Iterator[tuple[int, int]]:
    """Yield (identity, bytes) of every piece of memory that the arrays of a result lie in."""
    if isinstance(value, np.ndarray):
        owner: Any = value
        while isinstance(owner, np.ndarray) and owner.base is not None:
            owner = owner.base
        owner = owner.obj if isinstance(owner, memoryview) else owner
        if not isinstance(owner, mmap.mmap):
            yield id(owner), int(getattr(owner, "nbytes", value.nbytes))
    elif is_dataclass(value):
        for field in fields(value):
            yield from array_owners(getattr(value, field.name))
    elif isinstance(value, list | tuple):
        for part in value:
            yield from array_owners(part)
    elif isinstance(value, Mapping):
        for part in value.values():
            yield from array_owners(part)
