"""Keeps what the user decides: every change to the study's journal, or to a recovery file, in order, on one thread."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Future, ThreadPoolExecutor
from pathlib import Path
from typing import Any

from PySide6.QtCore import QObject, QTimer, Signal

from meseta.errors import MesetaError, WorkError
from meseta.window.opening import Unfinished, write_unfinished
from meseta.window.places import Place
from meseta.window.session import Change, Document, Session

__all__ = ["Keeper"]


class Keeper(QObject):
    """Hands changes to the open study, or writes a recovery file where nothing was saved yet."""

    failed = Signal(object)
    _done = Signal(object, object)

    def __init__(self, session: Session, recovery: Path) -> None:
        super().__init__(session)
        self._session, self._recovery = session, recovery
        self._pool = ThreadPoolExecutor(1, thread_name_prefix="meseta-keep")
        self._study: Any = None
        self._paths: tuple[str, ...] = ()
        self._kept: Document | None = None
        self._closed = False
        self._later = QTimer(self)
        self._later.setSingleShot(True)
        self._later.setInterval(1000)
        self._later.timeout.connect(self._write_recovery)
        self._done.connect(lambda function, value: function(value))
        session.document_changed.connect(self._changed)

    @property
    def study(self) -> Any:
        """The open study, never to be touched on the window's thread: a call waits for those of other threads.

        None where nothing was saved yet.
        """
        return self._study

    @property
    def paths(self) -> tuple[str, ...]:
        """What is open, as the user named it: a study, or recordings."""
        return self._paths

    def open(self, study: Any, paths: tuple[str, ...]) -> None:
        """Keep changes in another study (None: in the recovery file) from now on."""
        self._let_go()
        self._study, self._paths, self._kept = study, paths, self._session.document
        if study is None and paths:
            self._later.start()

    def _let_go(self) -> None:
        self._later.stop()
        study, self._study = self._study, None
        if study is not None:
            self._run(study.close)

    def _changed(self, change: Change) -> None:
        if self._session.analysis is None:
            return
        if self._study is None:
            self._later.start()
        elif not self._session.dragging and (change.recipe or change.decisions):
            self._hand_over(change.after)

    def _hand_over(self, document: Document) -> None:
        study, text = self._study, self._session.undo.undoText()
        self._run(lambda: study.change(recipe=document.recipe, decisions=document.decisions, text=text))

    def _write_recovery(self) -> None:
        session = self._session
        if session.analysis is None or self._study is not None or not self._paths:
            return
        document = session.document
        place = Place.of(session)
        unfinished = Unfinished(
            self._paths, document.recipe.text(), document.decisions.plain(), {} if place is None else place.plain()
        )
        path = self._recovery
        self._run(lambda: write_unfinished(path, unfinished))

    def save(self, done: Callable[[Any], None]) -> None:
        """Save the open study."""
        if self._study is not None:
            self._run(self._study.save, done)

    def _run(self, function: Callable[[], Any], done: Callable[[Any], None] | None = None) -> Future[None]:
        def work() -> None:
            try:
                value = function()
            except MesetaError as error:
                self._done.emit(self.failed.emit, error)
            except OSError as error:
                self._done.emit(
                    self.failed.emit, WorkError(f"cannot be kept ({error.strerror})", str(error.filename or ""))
                )
            else:
                if done is not None:
                    self._done.emit(done, value)

        return self._pool.submit(work)

    def forget_recovery(self) -> None:
        """Take the recovery file away: the session ended as the user wanted, or everything is in a study."""
        path = self._recovery
        self._run(lambda: path.unlink(missing_ok=True))

    def close(self, *, forget: bool) -> None:
        """Write what is due, let go of the study, and end the thread."""
        if self._closed:
            return
        self._closed = True
        if self._later.isActive() and not forget:
            self._write_recovery()
        self._let_go()
        if forget:
            self.forget_recovery()
        self._pool.shutdown(wait=True)
