"""The one runner of work off the window's thread: request in, response out, the newest wins.

A request is a plain function of a :class:`~meseta.work.Work` that has captured every input when it was made; it
touches no widget and no live model.  Its response comes back to the window's thread by a signal, with the request's
number.  A newer request on the same channel cancels the older one and the older response is dropped on arrival.
"""

from __future__ import annotations

import itertools
import os
import sys
import threading
from collections.abc import Callable
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import Any

from PySide6.QtCore import QObject, QTimer, Signal

from meseta.errors import Cancelled, MesetaError, WorkError
from meseta.work import Progress, Work

__all__ = ["Channel", "JobRunner", "Request", "Response"]

Task = Callable[[Work, Callable[[Any], None]], Any]
"""Takes the work and a function that hands over partial responses; returns the response."""

SHOW_AFTER_MS = 300
"""Work that ends sooner than this is never shown: a flickering progress bar says nothing."""


BLOCK_SAMPLES = 500_000
"""Smaller blocks than elsewhere: each call that keeps the interpreter is short, so the window's thread waits less."""


STEP_BACK = 3
"""How much less urgent long work is than painting, as the system counts it: half as much of a contested core."""


@dataclass(frozen=True)
class Channel:
    """A kind of work of which only the newest request counts.

    Attributes
    ----------
    name : str
        Key of the channel.
    quick : bool
        Quick work (a trace to draw) has a thread of its own and never waits behind long work.
    shown : bool
        Whether progress stands in the status line.
    files : bool
        Reading and writing files has a thread of its own: results are worked out while reading goes on.
    alone : bool
        Has a thread of its own and keeps no other work waiting.
    lasting : bool
        Belongs to no recording: it goes on when all work on a recording is stopped.
    """

    name: str
    quick: bool = False
    shown: bool = True
    files: bool = False
    alone: bool = False
    lasting: bool = False

    @property
    def lane(self) -> str:
        """Name of the threads that do this work."""
        return self.name if self.alone else "quick" if self.quick else "files" if self.files else "long"


@dataclass(frozen=True)
class Request:
    """One piece of work: its number, what it is for the reader, and whom to tell."""

    number: int
    channel: Channel
    label: str
    task: Task
    done: Callable[[Any], None]
    failed: Callable[[MesetaError], None]
    part: Callable[[Any], None]
    cancel: threading.Event = field(default_factory=threading.Event)


@dataclass(frozen=True)
class Response:
    """What came of a request: a result, a part of one, or an error in words."""

    request: Request
    result: Any = None
    error: MesetaError | None = None
    final: bool = True


def _step_back() -> None:
    """Let the window's thread go first where both want a core; threads that this one starts step back with it."""
    if sys.platform == "linux":  # elsewhere a priority belongs to a whole process
        os.setpriority(os.PRIO_PROCESS, threading.get_native_id(), STEP_BACK)


def _ignored(_: Any) -> None:
    """Take a part that nobody asked for."""


class JobRunner(QObject):
    """Runs requests on a few threads (two quick, one for files, one long, one for each channel that has its own).

    Responses come back to the window's thread.
    """

    progressed = Signal(object)
    """A :class:`~meseta.work.Progress` of the longest-running shown request, or None when nothing runs."""
    failed = Signal(object)
    """A :class:`~meseta.errors.MesetaError` that no one else took."""
    idle = Signal()
    """Nothing runs and nothing waits."""
    _arrived = Signal(object)

    def __init__(self, parent: QObject | None = None) -> None:
        super().__init__(parent)
        self._pools: dict[str, ThreadPoolExecutor] = {}
        self._numbers = itertools.count(1)
        self._running: dict[int, tuple[Request, Future[None]]] = {}
        self._newest: dict[str, int] = {}
        self._progress: dict[int, Progress] = {}
        self._shown_any = False
        self._closed = False
        self._arrived.connect(self._take)
        self._clock = QTimer(self)
        self._clock.setInterval(SHOW_AFTER_MS)
        self._clock.timeout.connect(self._show_progress)

    # -- asking ---------------------------------------------------------------------------------------------------

    def submit(
        self,
        channel: Channel,
        label: str,
        task: Task,
        done: Callable[[Any], None],
        failed: Callable[[MesetaError], None] | None = None,
        part: Callable[[Any], None] = _ignored,
    ) -> int:
        """Start a piece of work; an older request on the same channel is cancelled.

        Returns
        -------
        int
            Number of the request; 0 where the runner is closed.
        """
        if self._closed:
            return 0
        self.cancel(channel)
        request = Request(next(self._numbers), channel, label, task, done, failed or self.failed.emit, part)
        self._newest[channel.name] = request.number
        self._running[request.number] = (request, self._pool(channel.lane).submit(self._run, request))
        if not self._clock.isActive():
            self._clock.start()
        return request.number

    def _pool(self, lane: str) -> ThreadPoolExecutor:
        if lane not in self._pools:
            quick = lane == "quick"
            self._pools[lane] = ThreadPoolExecutor(2 if quick else 1, f"meseta-{lane}", None if quick else _step_back)
        return self._pools[lane]

    def cancel(self, channel: Channel | None = None, *, spare_files: bool = False) -> None:
        """Ask the work of a channel (or all work, or all but that on files) to stop; its responses are dropped.

        Work that belongs to no recording is stopped by its own channel only.
        """
        for request, future in list(self._running.values()):
            one = request.channel
            spared = one.lasting or (spare_files and one.files)
            if one.name == channel.name if channel is not None else not spared:
                self._stop(request, future)

    def _stop(self, request: Request, future: Future[None]) -> None:
        request.cancel.set()
        self._newest.pop(request.channel.name, None)
        if future.cancel():
            self._forget(request)

    @property
    def busy(self) -> bool:
        """Whether anything runs or waits."""
        return bool(self._running)

    @property
    def stoppable(self) -> bool:
        """Whether anything runs that the user can stop."""
        return any(not request.channel.lasting for request, _ in self._running.values())

    def runs(self, channel: Channel) -> bool:
        """Return whether the newest request of a channel is still under way."""
        return channel.name in self._newest

    def close(self) -> None:
        """Cancel everything, wait for the threads, and take no more requests."""
        self._closed = True
        self._clock.stop()
        for request, future in list(self._running.values()):
            self._stop(request, future)
        for pool in self._pools.values():
            pool.shutdown(wait=True, cancel_futures=True)
        self._running.clear()
        self._newest.clear()

    # -- on the worker's thread -----------------------------------------------------------------------------------

    def _run(self, request: Request) -> None:
        def report(progress: Progress) -> None:
            self._progress[request.number] = progress

        def part(result: Any) -> None:
            self._arrived.emit(Response(request, result, final=False))

        work = Work(block_samples=BLOCK_SAMPLES, report=report, cancel=request.cancel)
        try:
            work.check()
            response = Response(request, request.task(work, part))
        except MesetaError as error:
            response = Response(request, error=error)
        except Exception as error:  # noqa: BLE001 - a defect in a worker must become one visible message
            response = Response(request, error=_defect(error, request.label))
        self._arrived.emit(response)

    # -- back on the window's thread ------------------------------------------------------------------------------

    def _take(self, response: Response) -> None:
        request = response.request
        newest = self._newest.get(request.channel.name) == request.number
        if response.final:
            self._forget(request)
            if newest:
                del self._newest[request.channel.name]
        if newest and not self._closed:
            self._hand_over(response)
        if not self._running:
            self._rest()

    def _hand_over(self, response: Response) -> None:
        if response.error is None:
            (response.request.done if response.final else response.request.part)(response.result)
        elif not isinstance(response.error, Cancelled):
            response.request.failed(response.error)

    def _forget(self, request: Request) -> None:
        self._running.pop(request.number, None)
        self._progress.pop(request.number, None)

    def _rest(self) -> None:
        self._clock.stop()
        self._clock.setInterval(SHOW_AFTER_MS)
        if self._shown_any:
            self._shown_any = False
            self.progressed.emit(None)
        self.idle.emit()

    def _show_progress(self) -> None:
        shown = [request for request, _ in self._running.values() if request.channel.shown]
        if not shown:
            return
        self._clock.setInterval(100)
        request = shown[0]
        self._shown_any = True
        self.progressed.emit(self._progress.get(request.number, Progress(request.label, 0, 0)))


def _defect(error: Exception, label: str) -> WorkError:
    """Return an unforeseen error as words a user can pass on."""
    return WorkError(
        f"a fault in Meseta stopped this work ({type(error).__name__}: {error})",
        label,
        "please report it with what you were doing; your data are unchanged",
    )
