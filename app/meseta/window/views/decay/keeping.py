"""The points of a length series as part of what is open: a study keeps them, undo takes a change of them back."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

from PySide6.QtCore import QObject, QTimer

from meseta.selection.decisions import LengthSeries
from meseta.window.session import Change, Session

__all__ = ["SeriesKeeper"]


class SeriesKeeper(QObject):
    """Carries points between a table and the decisions of the open recording.

    Parameters
    ----------
    session : Session
    series : callable
        Returns what stands in the table.
    show : callable
        Writes a series into the table.
    """

    def __init__(
        self, session: Session, series: Callable[[], LengthSeries], show: Callable[[LengthSeries], None]
    ) -> None:
        super().__init__(session)
        self._session, self._series, self._show = session, series, show
        self._seen = LengthSeries()
        self._showing = self._in_study = False
        session.traces_changed.connect(self._traces_changed)
        session.document_changed.connect(self._document_changed)
        session.saved_changed.connect(self._saved)

    def keep(self) -> None:
        """Make the points in the table part of the open recording's decisions, if the user changed them."""
        session, series = self._session, self._series()
        if session.traces is None or self._showing or series == self._seen:
            return
        self._seen = series
        if series != session.document.decisions.length_series:
            decisions = replace(session.document.decisions, length_series=series)
            session.change_decisions("change the length series", decisions)

    def _document_changed(self, change: Change) -> None:
        after = change.after.decisions.length_series
        if after != change.before.decisions.length_series:
            self._write(after)

    def _saved(self, clean: bool) -> None:
        self._in_study = self._in_study or (clean and bool(self._session.study_path))

    def _traces_changed(self) -> None:
        """Show the points of what is opened; points that no study keeps yet stay, and belong to it from now on.

        A series is put together from several recordings, one opened after the other: points of an earlier study stay
        in sight where what is opened has none of its own, and become part of it with the first change.
        """
        session = self._session
        if session.traces is None:
            return
        theirs, own = session.document.decisions.length_series, self._series()
        if theirs.rows:
            more = () if self._in_study else tuple(row for row in own.rows if row not in theirs.rows)
            self._write(replace(theirs, rows=(*theirs.rows, *more)))
        if not self._in_study and self._series().rows:
            self._seen = theirs
            QTimer.singleShot(0, self, self.keep)
        self._in_study = bool(session.study_path)

    def _write(self, series: LengthSeries) -> None:
        self._showing = True
        try:
            if series != self._series():
                self._show(series)
        finally:
            self._showing = False
        self._seen = series
