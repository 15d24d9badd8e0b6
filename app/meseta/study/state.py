"""What a study's history is about: recipe and decisions, and the difference between two states of them.

A change is a list of edits ``(path, old, new)`` of plain values; None stands for "not there".  So any change can be
written down as JSON, read by a person, applied, and taken back.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Mapping
from dataclasses import asdict, dataclass, field
from typing import Any

from meseta.recipe import Recipe
from meseta.selection import Decisions, Event, Group, LengthSeries, RemovedRange, Verdict

__all__ = ["Edit", "State", "applied", "difference", "words"]

Path = tuple[str, ...]
Edit = tuple[Path, Any, Any]
Flat = dict[Path, Any]

_FROM_RAW = ("intake", "calibration", "cutting")


@dataclass(frozen=True)
class State:
    """Recipe and decisions at one moment."""

    recipe: Recipe = field(default_factory=Recipe)
    decisions: Decisions = field(default_factory=Decisions)


def difference(before: State, after: State) -> list[Edit]:
    """Return the edits that lead from one state to another."""
    edits: list[Edit] = []
    for part, flat in _PARTS.items():
        old, new = _part(before, part), _part(after, part)
        if old is new or old == new:
            continue
        was, becomes = flat(old), flat(new)
        edits += [(path, value, becomes.get(path)) for path, value in was.items() if becomes.get(path) != value]
        edits += [(path, None, value) for path, value in becomes.items() if path not in was]
    return edits


def applied(state: State, edits: Iterable[Edit], *, backwards: bool = False) -> State:
    """Return the state after edits, or before them."""
    flat: dict[str, Flat] = {}
    for path, old, new in edits:
        part = _PART_OF[path[0]]
        if part not in flat:
            flat[part] = _PARTS[part](_part(state, part))
        value = old if backwards else new
        if value is None and path[0] != "recipe":
            flat[part].pop(path, None)
        else:
            flat[part][path] = value
    return _assembled(state, flat)


def words(edits: Iterable[Edit]) -> tuple[str, str]:
    """Return the kind of a change ("calibration", "recipe", "decision") and one line that says what it was."""
    edits = list(edits)
    settings = [(path[1], old, new) for path, old, new in edits if path[0] == "recipe"]
    if settings:
        kind = "calibration" if any(name.split(".")[0] in _FROM_RAW for name, _, _ in settings) else "recipe"
        said = [f"{name}: {_short(old)} -> {_short(new)}" for name, old, new in settings]
        return kind, _listed(said)
    said = []
    for title, count in _counts(edits).items():
        said.append(f"{title} ({count})" if count > 1 else title)
    return "decision", _listed(said) or "nothing changed"


def _counts(edits: Iterable[Edit]) -> dict[str, int]:
    counts: dict[str, int] = {}
    for path, old, new in edits:
        title = _DECISION_WORDS[path[0]](path, old, new)
        counts[title] = counts.get(title, 0) + 1
    return counts


def _verdict_words(_: Path, __: Any, new: Any) -> str:
    if new is None:
        return "left to the rules"
    verb = "kept by hand" if new["keep"] else "rejected by hand"
    return f"{verb}: {new['reason']}" if new["reason"] else verb


_DECISION_WORDS: Mapping[str, Callable[[Path, Any, Any], str]] = {
    "verdict": _verdict_words,
    "group": lambda path, old, new: f"group '{path[1]}' {'removed' if new is None else 'changed' if old else 'made'}",
    "member": lambda path, _, new: f"{'out of' if new is None else 'into'} group '{path[1]}'",
    "event": lambda path, _, new: f"event {'removed' if new is None else 'marked'}: {path[2]}",
    "source": lambda _, __, new: "recording brought back" if new is None else "recording removed",
    "range": lambda _, __, new: "range brought back" if new is None else "range removed",
    "series": lambda _, __, new: "length series emptied" if new is None else "length series changed",
}


def _short(value: Any) -> str:
    text = "not set" if value is None else json.dumps(value, ensure_ascii=False)
    return text if len(text) <= 80 else text[:77] + "..."


def _listed(said: list[str]) -> str:
    return "; ".join(said) if len(said) <= 6 else "; ".join(said[:5]) + f"; and {len(said) - 5} more"


# -- a state as plain values by path ------------------------------------------------------------------------------


def _recipe_flat(recipe: Recipe) -> Flat:
    document = recipe.model_dump(mode="json")
    return {("recipe", f"{name}.{key}"): value for name, part in document.items() for key, value in part.items()}


def _verdicts_flat(verdicts: Mapping[str, Verdict]) -> Flat:
    return {("verdict", name): {"keep": verdict.keep, "reason": verdict.reason} for name, verdict in verdicts.items()}


def _groups_flat(groups: Mapping[str, Group]) -> Flat:
    flat: Flat = {}
    for name, group in groups.items():
        flat[("group", name)] = {"colour": group.colour, "symbol": group.symbol}
        flat.update(dict.fromkeys((("member", name, identity) for identity in group.members), True))
    return flat


def _events_flat(events: tuple[Event, ...]) -> Flat:
    return {("event", event.identity, event.text, event.date): True for event in events}


def _sources_flat(sources: frozenset[str]) -> Flat:
    return {("source", sha256): True for sha256 in sources}


def _ranges_flat(ranges: tuple[RemovedRange, ...]) -> Flat:
    return {("range", json.dumps(asdict(part), sort_keys=True)): True for part in ranges}


def _series_flat(series: LengthSeries) -> Flat:
    return {("series",): {"unit": series.unit, "rows": [list(row) for row in series.rows]}} if series.rows else {}


_PARTS: Mapping[str, Callable[[Any], Flat]] = {
    "recipe": _recipe_flat,
    "verdicts": _verdicts_flat,
    "groups": _groups_flat,
    "events": _events_flat,
    "removed_sources": _sources_flat,
    "removed_ranges": _ranges_flat,
    "length_series": _series_flat,
}
_PART_OF: Mapping[str, str] = {
    "recipe": "recipe",
    "verdict": "verdicts",
    "group": "groups",
    "member": "groups",
    "event": "events",
    "source": "removed_sources",
    "range": "removed_ranges",
    "series": "length_series",
}


def _part(state: State, part: str) -> Any:
    return state.recipe if part == "recipe" else getattr(state.decisions, part)


def _assembled(state: State, flat: Mapping[str, Flat]) -> State:
    """Return the state with some of its parts made anew."""
    recipe = _recipe_of(flat["recipe"]) if "recipe" in flat else state.recipe
    decisions = state.decisions
    return State(
        recipe,
        Decisions(
            verdicts={path[1]: Verdict(**value) for path, value in flat["verdicts"].items()}
            if "verdicts" in flat
            else decisions.verdicts,
            groups=_groups_of(flat["groups"]) if "groups" in flat else decisions.groups,
            events=tuple(sorted((Event(*path[1:]) for path in flat["events"]), key=_event_order))
            if "events" in flat
            else decisions.events,
            removed_sources=frozenset(path[1] for path in flat["removed_sources"])
            if "removed_sources" in flat
            else decisions.removed_sources,
            removed_ranges=tuple(RemovedRange(**json.loads(path[1])) for path in sorted(flat["removed_ranges"]))
            if "removed_ranges" in flat
            else decisions.removed_ranges,
            length_series=_series_of(flat["length_series"]) if "length_series" in flat else decisions.length_series,
        ),
    )


def _series_of(flat: Flat) -> LengthSeries:
    plain = flat.get(("series",))
    return LengthSeries() if plain is None else LengthSeries(plain["unit"], tuple(map(tuple, plain["rows"])))


def _event_order(event: Event) -> tuple[str, str, str]:
    return event.identity, event.text, event.date


def _recipe_of(flat: Flat) -> Recipe:
    document: dict[str, dict[str, Any]] = {}
    for (_, name), value in flat.items():
        section, _, key = name.partition(".")
        document.setdefault(section, {})[key] = value
    return Recipe.build(document)


def _groups_of(flat: Flat) -> dict[str, Group]:
    members: dict[str, list[str]] = {path[1]: [] for path in flat if path[0] == "group"}
    for path in flat:
        if path[0] == "member":
            members[path[1]].append(path[2])
    return {name: Group(frozenset(found), **flat[("group", name)]) for name, found in members.items()}
