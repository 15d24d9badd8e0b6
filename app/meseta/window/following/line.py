"""The part of the status line that says what is followed, what was taken in, and what waits."""

from __future__ import annotations

from pathlib import Path

from PySide6.QtCore import Signal
from PySide6.QtWidgets import QHBoxLayout, QToolButton, QWidget

from meseta import typeset
from meseta.window.elided import Elided
from meseta.window.following.follower import Followed, Follower

__all__ = ["FollowLine", "details", "sentence"]


def sentence(followed: Followed) -> str:
    """Return in one line how following stands."""
    last = followed.last
    taken = f"{_counted(last.recordings, 'recording')} taken in" if last.recordings else "nothing taken in yet"
    waits = f"; {last.words}" if last.words else ""
    return f"Following {Path(followed.folder).name}: {taken}{waits}"


def details(followed: Followed) -> str:
    """Return everything that is known, line by line."""
    last = followed.last
    lines = [
        f"{followed.folder} is followed into {followed.study}.",
        f"{_counted(last.recordings, 'recording')} with {_counted(last.traces, 'trace')} taken in since it began.",
    ]
    return "\n".join([*lines, *(f"waits: {one}" for one in last.waiting)])


def _counted(number: int, what: str) -> str:
    return f"{typeset.integer(number)} {what}{'' if number == 1 else 's'}"


class FollowLine(QWidget):
    """How following stands, with a button to end it and one that lists the files left out; hidden where none is."""

    list_asked = Signal()

    def __init__(self, follower: Follower) -> None:
        super().__init__()
        self._follower = follower
        self.words, self.left_out, self.stop = Elided(), QToolButton(), QToolButton()
        self.stop.setText("Stop following")
        self.stop.setAccessibleName("Stop following the folder")
        self.left_out.setProperty("tone", "fit")
        row = QHBoxLayout(self)
        row.setContentsMargins(8, 0, 8, 0)
        row.addWidget(self.words, 1)
        row.addWidget(self.left_out)
        row.addWidget(self.stop)
        self.setMinimumWidth(360)
        self.stop.clicked.connect(follower.stop)
        self.left_out.clicked.connect(self.list_asked)
        follower.changed.connect(self.refresh)
        self.refresh()

    def refresh(self) -> None:
        """Say how it stands now."""
        followed = self._follower.followed
        self.setVisible(followed is not None)
        if followed is None:
            return
        self.words.say(sentence(followed))
        self.words.setToolTip(details(followed))
        count = len(followed.bad)
        self.left_out.setVisible(count > 0)
        self.left_out.setText(f"{typeset.integer(count)} left out …")
        self.left_out.setAccessibleName(f"List the {_counted(count, 'file')} left out")
