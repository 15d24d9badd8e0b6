"""Decisions by hand: verdicts, groups, events and what was taken out of the record, all by the identity of traces."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping
from dataclasses import asdict, dataclass, field, replace
from typing import Any

__all__ = ["Decisions", "Event", "Group", "LengthSeries", "RemovedRange", "Verdict"]


@dataclass(frozen=True)
class Verdict:
    """A decision by hand on one trace: keep or reject it whatever the rules say, and why."""

    keep: bool
    reason: str = ""


@dataclass(frozen=True)
class Group:
    """A named set of traces, by identity, with its colour (``#rrggbb``) and symbol."""

    members: frozenset[str]
    colour: str = ""
    symbol: str = ""


@dataclass(frozen=True)
class Event:
    """Something that happened during the record: before which trace (identity), what, and when (ISO date) if known."""

    identity: str
    text: str
    date: str = ""


@dataclass(frozen=True)
class RemovedRange:
    """A part of the record that takes no part: raw samples of one recording, or hours of the record.

    Attributes
    ----------
    sha256 : str
        The recording; empty stands for every recording (only with ``unit`` "second").
    start, stop : float
        Half-open range; a trace is removed where its beginning lies in it.
    unit : str
        "sample" (raw samples of the recording) or "second" (the trace table's ``time_second``).
    reason : str
        Why it was removed.
    """

    sha256: str
    start: float
    stop: float
    unit: str = "sample"
    reason: str = ""


@dataclass(frozen=True)
class LengthSeries:
    """The points of a decay constant as the user wrote them, from this recording and others.

    Attributes
    ----------
    unit : str
        What a length counts ("nm", "carbon" ...).
    rows : tuple of tuple of str
        Length, conductance in G0, error of either, label: as text, so that what was written stays as it was written.
    """

    unit: str = "nm"
    rows: tuple[tuple[str, ...], ...] = ()


@dataclass(frozen=True)
class Decisions:
    """All that was decided by hand, by the identity of traces (text form).  Frozen: each change makes a new one."""

    verdicts: Mapping[str, Verdict] = field(default_factory=dict)
    groups: Mapping[str, Group] = field(default_factory=dict)
    events: tuple[Event, ...] = ()
    removed_sources: frozenset[str] = frozenset()
    removed_ranges: tuple[RemovedRange, ...] = ()
    length_series: LengthSeries = LengthSeries()

    def __bool__(self) -> bool:
        """Return whether anything was decided."""
        removed = self.removed_sources or self.removed_ranges
        return bool(self.verdicts or self.groups or self.events or removed or self.length_series.rows)

    def key(self) -> str:
        """Return a hash of the content that can change a result (colours, symbols and length series cannot)."""
        plain = {
            "verdicts": {name: asdict(verdict) for name, verdict in sorted(self.verdicts.items())},
            "groups": {name: sorted(group.members) for name, group in sorted(self.groups.items())},
            "events": sorted([event.identity, event.text] for event in self.events),
            "removed": sorted(self.removed_sources),
            "ranges": sorted(json.dumps(asdict(part)) for part in self.removed_ranges),
        }
        return hashlib.sha256(json.dumps(plain, sort_keys=True).encode()).hexdigest()

    def with_verdict(self, identities: Iterable[str], keep: bool, reason: str = "") -> Decisions:
        """Return the decisions with traces kept or rejected by hand."""
        verdict = Verdict(keep, reason)
        return replace(self, verdicts={**self.verdicts, **dict.fromkeys(identities, verdict)})

    def without_verdict(self, identities: Iterable[str]) -> Decisions:
        """Return the decisions with the traces left to the rules again."""
        gone = set(identities)
        return replace(self, verdicts={name: verdict for name, verdict in self.verdicts.items() if name not in gone})

    def with_group(self, name: str, members: Iterable[str], colour: str = "", symbol: str = "") -> Decisions:
        """Return the decisions with a group made or replaced."""
        return replace(self, groups={**self.groups, name: Group(frozenset(members), colour, symbol)})

    def without_group(self, name: str) -> Decisions:
        """Return the decisions without a group."""
        return replace(self, groups={other: group for other, group in self.groups.items() if other != name})

    def with_event(self, event: Event) -> Decisions:
        """Return the decisions with one more event on the record."""
        return replace(self, events=(*self.events, event))

    def without_event(self, event: Event) -> Decisions:
        """Return the decisions without an event."""
        return replace(self, events=tuple(other for other in self.events if other != event))

    def with_removed(self, *parts: str | RemovedRange) -> Decisions:
        """Return the decisions with recordings (by SHA-256) and ranges taken out, all in one action."""
        sources = {part for part in parts if isinstance(part, str)}
        ranges = [part for part in parts if isinstance(part, RemovedRange) and part not in self.removed_ranges]
        return replace(
            self,
            removed_sources=self.removed_sources | sources,
            removed_ranges=(*self.removed_ranges, *ranges),
        )

    def with_restored(self, *parts: str | RemovedRange) -> Decisions:
        """Return the decisions with recordings and ranges brought back."""
        return replace(
            self,
            removed_sources=self.removed_sources - {part for part in parts if isinstance(part, str)},
            removed_ranges=tuple(part for part in self.removed_ranges if part not in parts),
        )

    def identities(self) -> frozenset[str]:
        """Return every trace identity that these decisions name."""
        members = [group.members for group in self.groups.values()]
        return frozenset(self.verdicts).union(*members, (event.identity for event in self.events))

    def plain(self) -> dict[str, Any]:
        """Return the decisions as plain nested values, as JSON stores them."""
        return {
            "verdicts": {name: asdict(verdict) for name, verdict in self.verdicts.items()},
            "groups": {
                name: {"members": sorted(group.members), "colour": group.colour, "symbol": group.symbol}
                for name, group in self.groups.items()
            },
            "events": [asdict(event) for event in self.events],
            "removed_sources": sorted(self.removed_sources),
            "removed_ranges": [asdict(part) for part in self.removed_ranges],
            "length_series": {"unit": self.length_series.unit, "rows": [list(row) for row in self.length_series.rows]},
        }

    @classmethod
    def parse(cls, plain: Mapping[str, Any]) -> Decisions:
        """Return the decisions that :meth:`plain` wrote."""
        return cls(
            verdicts={name: Verdict(**verdict) for name, verdict in plain.get("verdicts", {}).items()},
            groups={
                name: Group(frozenset(group["members"]), group["colour"], group["symbol"])
                for name, group in plain.get("groups", {}).items()
            },
            events=tuple(Event(**event) for event in plain.get("events", ())),
            removed_sources=frozenset(plain.get("removed_sources", ())),
            removed_ranges=tuple(RemovedRange(**part) for part in plain.get("removed_ranges", ())),
            length_series=_series(plain.get("length_series", {})),
        )


def _series(plain: Mapping[str, Any]) -> LengthSeries:
    return LengthSeries(plain.get("unit", "nm"), tuple(tuple(map(str, row)) for row in plain.get("rows", ())))
