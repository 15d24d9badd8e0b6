"""Where the user was: current trace, axes in view and conditions of each recording, to reopen exactly there."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, fields
from pathlib import Path
from typing import Any

from PySide6.QtCore import QSettings

from meseta.traces import TraceIdentity
from meseta.window.conditions import Condition, ConditionSet
from meseta.window.document import Span
from meseta.window.session import Session

__all__ = ["Place", "Places"]

KEPT = 40
_KEY = "places"


@dataclass(frozen=True)
class Place:
    """What is looked at.

    Attributes
    ----------
    trace : str
        Identity of the current trace, empty where there is none.
    axis : str
        Axis that ``span`` belongs to.
    span, drive_span : (float, float)
        Parts of the conductance axis (as drawn) and of the displacement axis in view.
    conditions : ConditionSet
    """

    trace: str
    axis: str
    span: tuple[float, float]
    drive_span: tuple[float, float]
    conditions: ConditionSet

    @classmethod
    def of(cls, session: Session) -> Place | None:
        """Return where a session is; None where nothing is open."""
        traces = session.traces
        if traces is None:
            return None
        here = traces.identity(session.current).text() if 0 <= session.current < traces.traces else ""
        ends = (session.span.low, session.span.high)
        return cls(here, session.axis, ends, session.drive_span, session.document.conditions)

    def plain(self) -> dict[str, Any]:
        """Return the place as plain values."""
        return asdict(self)

    @classmethod
    def parse(cls, plain: Mapping[str, Any]) -> Place | None:
        """Return the place that :meth:`plain` gave; None where it cannot be understood."""
        known = {field.name for field in fields(Condition)}
        try:
            conditions = plain["conditions"]
            listed = tuple(
                Condition(**{name: value for name, value in one.items() if name in known})
                for one in conditions["conditions"]
            )
            span, drive = (tuple(map(float, plain[name])) for name in ("span", "drive_span"))
            joined = "or" if conditions["joined"] == "or" else "and"
            return cls(str(plain["trace"]), str(plain["axis"]), span[:2], drive[:2], ConditionSet(listed, joined))  # type: ignore[arg-type]
        except (KeyError, TypeError, ValueError, AttributeError):
            return None

    def show(self, session: Session) -> None:
        """Bring a session back to this place; conditions come with the document."""
        traces = session.traces
        if traces is None:
            return
        if self.axis == session.axis:
            session.look_from(Span(*self.span), self.drive_span)
        try:
            row = traces.row_of(TraceIdentity.parse(self.trace)) if self.trace else -1
        except ValueError:
            row = -1
        if row >= 0:
            session.go_to(row)


class Places:
    """The places of the last recordings, in the user's settings."""

    def __init__(self, settings: QSettings) -> None:
        self._settings = settings

    def remember(self, paths: Sequence[str], place: Place | None) -> None:
        """Keep where the user was in a recording."""
        if not paths or place is None:
            return
        kept = self._all()
        kept.pop(_name(paths), None)
        kept[_name(paths)] = place.plain()
        self._settings.setValue(_KEY, json.dumps(dict(list(kept.items())[-KEPT:])))

    def recall(self, paths: Sequence[str]) -> Place | None:
        """Return where the user was; None where that is not known."""
        found = self._all().get(_name(paths))
        return None if found is None else Place.parse(found)

    def _all(self) -> dict[str, Any]:
        try:
            kept = json.loads(str(self._settings.value(_KEY, "{}")))
        except ValueError:
            return {}
        return kept if isinstance(kept, dict) else {}


def _name(paths: Sequence[str]) -> str:
    whole = "\n".join(str(Path(path).absolute()) for path in paths)
    return hashlib.sha256(whole.encode()).hexdigest()[:24]
