"""Follows a folder into the open study: a look every few seconds, each a piece of work on a thread of its own."""

from __future__ import annotations

import json
import math
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from PySide6.QtCore import QObject, QSettings, QTimer, Signal

from meseta.errors import MesetaError
from meseta.recipe import Recipe
from meseta.window.following.looks import Outlook, begun, ended, outlook
from meseta.window.jobs import Channel
from meseta.window.opening import Opened
from meseta.window.session import Session

if TYPE_CHECKING:
    from meseta.study.following import Following

__all__ = ["FOLLOW", "Followed", "Follower", "Remembered"]

FOLLOW = Channel("follow", shown=False, lasting=True, alone=True)
LOOK_SECOND = 2.0
GROW_SECOND = 2.0
"""Views grow no oftener than this, and no oftener than half of the time that working them out takes allows."""
GROW_LOOK_MS = 200
_STORED = "following"


@dataclass(frozen=True)
class Remembered:
    """What was followed last; ``active`` where nobody stopped it."""

    folder: str
    study: str
    active: bool = False


@dataclass(frozen=True)
class Followed:
    """What is followed, and how it stands."""

    folder: str
    study: str
    last: Outlook = field(default_factory=Outlook)
    late: tuple[MesetaError, ...] = ()

    @property
    def bad(self) -> tuple[MesetaError, ...]:
        """Everything that was told of files."""
        return (*self.last.bad, *self.late)


class Follower(QObject):
    """Looks, hands what was taken in to the session, and remembers over a restart what is followed."""

    changed = Signal()
    """What is followed, or how it stands."""
    made = Signal(object)
    """A study was made of the first files: :class:`~meseta.window.opening.Opened`."""
    unsure = Signal(str)
    """How this file is read must be settled before a study is made of it and those like it."""
    failed = Signal(object)
    """Following ended for this reason."""

    def __init__(self, session: Session, settings: QSettings) -> None:
        super().__init__(session)
        self._session, self._settings = session, settings
        self.followed: Followed | None = None
        self.still = threading.Lock()
        """Held during a look; who reads the study file as a whole holds it too."""
        self._held: list[Following] = []
        """The one under way, from the moment when it holds anything."""
        self._owns_study = self._agreed = False
        self._grown: Opened | None = None
        self._grew_at, self._took_second, self._measuring = -math.inf, 0.0, False
        self._next = QTimer(self)
        self._next.setSingleShot(True)
        self._next.timeout.connect(self._look)
        self._growing = QTimer(self)
        self._growing.setInterval(GROW_LOOK_MS)
        self._growing.timeout.connect(self._grow)

    # -- beginning and ending ----------------------------------------------------------------------------------------

    @property
    def active(self) -> bool:
        """Whether a folder is followed."""
        return self.followed is not None

    def start(self, folder: str, path: str, study: Any = None) -> None:
        """Follow a folder.

        Parameters
        ----------
        folder : str
        path : str
            The study; made of the first whole files where it is not there.
        study : Study, optional
            That study, where it is open.
        """
        self.stop()
        self.followed, self._agreed = Followed(folder, path), study is not None
        self._owns_study = study is None
        self._store(active=True)
        recipe = None if study is not None else self._session.document.recipe
        held = self._held = []

        def task(_: Any, __: Callable[[Any], None]) -> None:
            held.append(begun(folder, path, recipe, study))

        self._session.jobs.submit(FOLLOW, "following", task, lambda _: self._look(), self._failed)
        self.changed.emit()

    def stop(self) -> None:
        """End following; what was taken in stays."""
        if self.followed is None:
            return
        self._store(active=False)
        self._end()
        self.changed.emit()

    def _end(self) -> None:
        self._next.stop()
        self._growing.stop()
        held, self._held = self._held, []
        owned, self._owns_study = self._owns_study, False
        self.followed, self._grown = None, None

        def task(_: Any, __: Callable[[Any], None]) -> None:
            for following in held:
                ended(following, close_study=owned)

        self._session.jobs.submit(FOLLOW, "following ends", task, lambda _: None)  # stops the look under way first

    def close(self) -> None:
        """Let go of everything once the threads have ended; a restart offers to go on."""
        self._next.stop()
        self._growing.stop()
        for following in self._held:
            ended(following, close_study=self._owns_study)
        self._held = []

    def _failed(self, error: MesetaError) -> None:
        self._end()
        self.changed.emit()
        self.failed.emit(error)

    def follows_into(self, study: Any) -> bool:
        """Return whether a folder is followed into this open study."""
        return study is not None and any(following.study is study for following in self._held)

    # -- looking -----------------------------------------------------------------------------------------------------

    def agree(self, recipe: Recipe) -> None:
        """Go on: files are read by this recipe."""
        for following in self._held:
            following.recipe, self._agreed = recipe, True
            self._look()

    def _look(self) -> None:
        if not self._held:
            return
        from meseta.window.filecheck.remembered import RememberedLayouts

        following, agreed = self._held[0], self._agreed
        behind = self.followed is not None and self.followed.last.behind
        remembered = {} if agreed else RememberedLayouts(self._settings).entries()

        def task(work: Any, _: Callable[[Any], None]) -> Outlook:
            with self.still:
                return outlook(following, agreed, remembered, work, behind=behind)

        self._session.jobs.submit(FOLLOW, "following", task, self._looked, self._failed)

    def _looked(self, seen: Outlook) -> None:
        followed = self.followed
        if followed is None:
            return
        self.followed = replace(followed, last=replace(seen, opened=None), late=(*followed.late, *seen.late))
        if seen.opened is not None:
            self._take(seen.opened)
        if self.followed != followed:
            self.changed.emit()
        if seen.unsure:
            self.unsure.emit(seen.unsure)
        else:
            self._next.start(0 if seen.more else round(LOOK_SECOND * 1000))

    # -- growing -----------------------------------------------------------------------------------------------------

    def _take(self, opened: Opened) -> None:
        if self._owns_study:
            self._owns_study, self._agreed = False, True
            self._grew_at, self._measuring = time.monotonic(), True
            self._growing.start()
            self.made.emit(opened)
            return
        self._grown = opened
        if not self._growing.isActive():
            self._growing.start()
            self._grow()

    def _grow(self) -> None:
        """Show what was taken in, once the views are up to date with what they have."""
        session, grown = self._session, self._grown
        now = time.monotonic()
        if session.pipeline.working:
            if self._measuring:
                self._took_second = now - self._grew_at
            return
        self._measuring = False  # what is worked out later was asked for by somebody else
        if grown is None:
            self._growing.stop()
            return
        if session.dragging or now - self._grew_at < max(GROW_SECOND, 2 * self._took_second):
            return
        self._grown, self._grew_at, self._took_second, self._measuring = None, now, 0.0, True
        session.replace_traces(grown.traces, grown.recipe)

    # -- remembering -------------------------------------------------------------------------------------------------

    def _store(self, *, active: bool) -> None:
        assert self.followed is not None
        folder, study = (str(Path(one).absolute()) for one in (self.followed.folder, self.followed.study))
        plain = {"folder": folder, "study": study, "active": active}
        self._settings.setValue(_STORED, json.dumps(plain))
        self._settings.sync()  # a machine that goes down while nobody is there has it too

    def remembered(self) -> Remembered | None:
        """Return what was followed last."""
        try:
            stored = json.loads(str(self._settings.value(_STORED, "")))
            return Remembered(str(stored["folder"]), str(stored["study"]), stored["active"] is True)
        except (ValueError, KeyError, TypeError):
            return None

    def folder_for(self, study: str) -> str:
        """Return the folder that was followed into a study last; empty where that is not known."""
        found = self.remembered()
        return found.folder if study and found is not None and found.study == str(Path(study).absolute()) else ""
