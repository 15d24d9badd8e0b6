"""A result that one view alone asks for: worked out in the background while the view is seen, the newest wins."""

from __future__ import annotations

from collections.abc import Callable, Hashable
from typing import Any

from PySide6.QtCore import QEvent, QObject
from PySide6.QtWidgets import QWidget

from meseta.errors import MesetaError
from meseta.window.jobs import Channel, Task
from meseta.window.session import Session
from meseta.window.visibility import Lazy

__all__ = ["OnDemand", "Wanted"]

Wanted = tuple[Hashable, Task]
"""What is to be worked out: a key that is equal where the result would be, and the work."""


class OnDemand(QObject):
    """Keeps one result of a view.

    Parameters
    ----------
    widget : QWidget
        The view: nothing is worked out while it is hidden.
    session : Session
    channel : Channel
    label : str
        The work as the status line calls it.
    wanted : callable
        Returns what is to be worked out now, or None where what it needs is not there yet.
    show : callable
        Draws :attr:`result` as it stands, and says :attr:`state`.

    Attributes
    ----------
    result : object
        The last result, current or not; None where there is none.
    error : MesetaError or None
    """

    def __init__(
        self,
        widget: QWidget,
        session: Session,
        channel: Channel,
        label: str,
        wanted: Callable[[], Wanted | None],
        show: Callable[[], None],
    ) -> None:
        super().__init__(widget)
        self._session, self._channel, self._label = session, channel, label
        self._wanted, self._show = wanted, show
        self._key: Hashable = None
        self._asked: Hashable = None
        self.result: Any = None
        self.error: MesetaError | None = None
        self.lazy = Lazy(widget, self._ask)
        widget.installEventFilter(self)
        session.traces_changed.connect(self._traces_changed)
        session.states_changed.connect(self.lazy.ask)
        session.document_changed.connect(lambda _: self.lazy.ask())

    @property
    def state(self) -> str:
        """Return "none", "working", "current", "out of date" or "failed"."""
        if self._session.jobs.runs(self._channel):
            return "working"
        if self.error is not None:
            return "failed"
        if self.result is None:
            return "none"
        wanted = self._wanted()
        return "current" if wanted is not None and wanted[0] == self._key else "out of date"

    def ask(self) -> None:
        """Have the result brought up to date when the view is seen."""
        self.lazy.ask()

    def again(self) -> None:
        """Work it out once more, as after a failure."""
        self._asked = self.error = None
        self.lazy.ask()

    def eventFilter(self, watched: QObject, event: QEvent) -> bool:
        """Stop the work when the view is hidden."""
        if event.type() == QEvent.Type.Hide and self._session.jobs.runs(self._channel):
            self._session.jobs.cancel(self._channel)
            self._asked = None
            self.lazy.ask()
        return False

    def _traces_changed(self) -> None:
        self._session.jobs.cancel(self._channel)
        self.result = self.error = self._key = self._asked = None
        self.lazy.ask()

    def _ask(self) -> None:
        wanted = self._wanted()
        if wanted is None:
            self._session.jobs.cancel(self._channel)
            self._asked = self.error = None
        elif wanted[0] != self._asked or (
            self.error is None and wanted[0] != self._key and not self._session.jobs.runs(self._channel)
        ):
            self._submit(*wanted)
        self._show()

    def _submit(self, key: Hashable, task: Task) -> None:
        self._asked, self.error = key, None

        def done(result: Any) -> None:
            self.result, self._key = result, key
            self._show()

        self._session.jobs.submit(self._channel, self._label, task, done, self._failed)

    def _failed(self, error: MesetaError) -> None:
        self.error = error
        self._show()
