"""How long work is done: in blocks, on several threads, with true progress and a cancel flag.

A :class:`Work` is handed down to every function that may take longer than a blink.  It knows nothing of Qt or
terminals: whoever starts the work gives it a ``report`` function and may set ``cancel`` from any thread.
"""

from __future__ import annotations

import os
import threading
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, field, replace
from typing import TypeVar

import numpy as np
import numpy.typing as npt

from meseta.errors import Cancelled

__all__ = ["Progress", "Work", "blocks_of"]

Item = TypeVar("Item")
Result = TypeVar("Result")


@dataclass(frozen=True)
class Progress:
    """A statement of how far one piece of work has come.

    Attributes
    ----------
    label : str
        What is being done, as a user reads it ("finding plateaus").
    done, total : int
        Units finished and units in all; ``total`` is 0 where it is not known.
    unit : str
        What is counted ("traces", "files").
    """

    label: str
    done: int
    total: int
    unit: str = "traces"


def _no_report(_: Progress) -> None:
    """Report to nobody."""


def _default_threads() -> int:
    affinity = getattr(os, "sched_getaffinity", None)
    cores = len(affinity(0)) if affinity else (os.cpu_count() or 1)
    return max(1, min(cores, 16))


@dataclass(frozen=True)
class Work:
    """Threads, block size, progress report and cancel flag of one piece of long work.

    Attributes
    ----------
    threads : int
        Number of threads for compiled kernels (they release the interpreter lock).
    block_samples : int
        Aimed size of a block; a block is never less than one trace.
    report : callable
        Called with a :class:`Progress` from the thread that started the work.
    cancel : threading.Event
        Set from any thread; the work then raises :class:`~meseta.errors.Cancelled` within one block.
    """

    threads: int = field(default_factory=_default_threads)
    block_samples: int = 2_000_000
    report: Callable[[Progress], None] = _no_report
    cancel: threading.Event = field(default_factory=threading.Event)

    def check(self) -> None:
        """Raise :class:`~meseta.errors.Cancelled` if the user has asked to stop."""
        if self.cancel.is_set():
            raise Cancelled

    def quiet(self) -> Work:
        """Return the same work without progress reports (the cancel flag is shared)."""
        return replace(self, report=_no_report)

    def tell(self, label: str, done: int, total: int, unit: str = "traces") -> None:
        """Report progress, after looking at the cancel flag."""
        self.check()
        self.report(Progress(label, done, total, unit))

    def each(
        self,
        function: Callable[[Item], Result],
        items: Sequence[Item],
        label: str,
        *,
        sizes: Sequence[int] | None = None,
        unit: str = "traces",
    ) -> Iterator[Result]:
        """Apply ``function`` to every item on all threads and yield the results in the order of the items.

        At most ``threads + 1`` results are held at any time, so memory stays bounded however many items there
        are, and the order of combination, hence every bit of the result, does not depend on the threads.

        Parameters
        ----------
        function : callable
            Takes one item.  It must not touch shared state.
        items : sequence
            Blocks, files, or whatever the work is cut into.
        label : str
            Name of the work in progress reports.
        sizes : sequence of int, optional
            Progress units that each item stands for (default 1 each).
        unit : str
            What the sizes count.

        Yields
        ------
        object
            ``function(item)``, one an item, in order.
        """
        weights = [1] * len(items) if sizes is None else list(sizes)
        total, done = sum(weights), 0
        self.tell(label, 0, total, unit)
        if self.threads == 1 or len(items) == 1:
            for item, weight in zip(items, weights, strict=True):
                self.check()
                result = function(item)
                done += weight
                self.tell(label, done, total, unit)
                yield result
            return
        pending: deque[tuple[Future[Result], int]] = deque()
        with ThreadPoolExecutor(self.threads, thread_name_prefix="meseta-work") as pool:
            try:
                for item, weight in zip(items, weights, strict=True):
                    self.check()
                    pending.append((pool.submit(function, item), weight))
                    if len(pending) > self.threads:
                        future, ready = pending.popleft()
                        result = future.result()
                        done += ready
                        self.tell(label, done, total, unit)
                        yield result
                while pending:
                    future, ready = pending.popleft()
                    result = future.result()
                    done += ready
                    self.tell(label, done, total, unit)
                    yield result
            finally:
                for future, _ in pending:
                    future.cancel()


def blocks_of(offsets: npt.NDArray[np.int64], block_samples: int) -> list[tuple[int, int]]:
    """Cut a row of traces into consecutive blocks of about ``block_samples`` samples.

    Parameters
    ----------
    offsets : (traces + 1,) int64
        Sample index at which each trace begins; the last entry is the total number of samples.
    block_samples : int
        Aimed number of samples a block; a longer trace is a block of its own.

    Returns
    -------
    list of (int, int)
        Half-open ranges of trace numbers that cover all traces in order.
    """
    traces = len(offsets) - 1
    blocks, first = [], 0
    while first < traces:
        limit = offsets[first] + block_samples
        last = int(np.searchsorted(offsets, limit, side="right")) - 1
        last = min(max(last, first + 1), traces)
        blocks.append((first, last))
        first = last
    return blocks
