"""Recipe, decisions, history and versions in the study file."""

from __future__ import annotations

import importlib.metadata
import json
import platform
from collections.abc import Mapping
from typing import Any, Final

import h5py
import numpy as np

from meseta import __version__
from meseta.recipe import Recipe
from meseta.selection import Decisions, Event, Group, LengthSeries, RemovedRange, Verdict
from meseta.study.columns import write_array, write_columns, write_text
from meseta.study.history import Entry, History
from meseta.study.strict import group, read_array, read_text

__all__ = [
    "FROM_RAW",
    "read_decisions",
    "read_history",
    "read_recipe",
    "read_versions",
    "versions",
    "write_decisions",
    "write_history",
    "write_recipe",
    "write_versions",
]

FROM_RAW: Final = ("intake", "calibration", "cutting")
"""Sections of the recipe that decide how traces are made of recordings."""

_EDITS_CHUNK: Final = 65_536
_LIBRARIES = ("numpy", "scipy", "numba", "h5py", "pyarrow")
_HEADS: Final = ("number", "when", "version", "kind", "text", "parent", "state")


def _renewed(root: h5py.Group, name: str) -> h5py.Group:
    if name in root:
        del root[name]
    return root.create_group(name)


# -- recipe and versions ------------------------------------------------------------------------------------------


def write_recipe(root: h5py.Group, recipe: Recipe) -> None:
    """Write ``/recipe``."""
    write_text(root, "recipe", recipe.text())


def read_recipe(root: h5py.Group) -> Recipe:
    """Return the recipe."""
    return Recipe.parse(read_text(root, "recipe"), f"{root.file.filename}: recipe")


def versions() -> dict[str, str]:
    """Return the versions that results may depend on."""
    found = {"meseta": __version__, "python": platform.python_version()}
    return found | {name: importlib.metadata.version(name) for name in _LIBRARIES}


def write_versions(root: h5py.Group) -> None:
    """Write ``/versions``."""
    write_text(root, "versions", json.dumps(versions()))


def read_versions(root: h5py.Group) -> dict[str, str]:
    """Return the versions with which the study was written last."""
    return {str(name): str(version) for name, version in json.loads(read_text(root, "versions")).items()}


# -- decisions ----------------------------------------------------------------------------------------------------


def write_decisions(root: h5py.Group, decisions: Decisions) -> None:
    """Write ``/decisions``, ``/groups``, ``/events``, ``/removed`` and ``/length_series``."""
    home = _renewed(root, "decisions")
    verdicts = decisions.verdicts
    write_columns(
        home,
        {
            "identity": _texts(verdicts),
            "keep": np.array([verdict.keep for verdict in verdicts.values()], np.bool_),
            "reason": _texts(verdict.reason for verdict in verdicts.values()),
        },
    )
    _write_groups(_renewed(root, "groups"), decisions.groups)
    write_columns(
        _renewed(root, "events"),
        {
            "identity": _texts(event.identity for event in decisions.events),
            "text": _texts(event.text for event in decisions.events),
            "date": _texts(event.date for event in decisions.events),
        },
    )
    ranges = decisions.removed_ranges
    write_columns(
        _renewed(root, "removed"),
        {
            "source_sha256": _texts(sorted(decisions.removed_sources)),
            "range_sha256": _texts(part.sha256 for part in ranges),
            "range_start": np.array([part.start for part in ranges], np.float64),
            "range_stop": np.array([part.stop for part in ranges], np.float64),
            "range_unit": _texts(part.unit for part in ranges),
            "range_reason": _texts(part.reason for part in ranges),
        },
    )
    series = decisions.length_series
    columns = {name: _texts(row[place] for row in series.rows) for place, name in enumerate(_SERIES)}
    write_columns(_renewed(root, "length_series"), {**columns, "unit": _texts([series.unit])})


_SERIES = ("length", "conductance_g0", "length_error", "conductance_error_g0", "label")


def _write_groups(home: h5py.Group, groups: Mapping[str, Group]) -> None:
    members = [(number, identity) for number, one in enumerate(groups.values()) for identity in sorted(one.members)]
    write_columns(
        home,
        {
            "name": _texts(groups),
            "colour": _texts(one.colour for one in groups.values()),
            "symbol": _texts(one.symbol for one in groups.values()),
            "member_group": np.array([number for number, _ in members], np.int64),
            "member_identity": _texts(identity for _, identity in members),
        },
    )


def read_decisions(root: h5py.Group) -> Decisions:
    """Return what was decided by hand."""
    home, removed = group(root, "decisions"), group(root, "removed")
    columns = (read_array(home, name).tolist() for name in ("identity", "keep", "reason"))
    events = (read_array(group(root, "events"), name).tolist() for name in ("identity", "text", "date"))
    ranges = (read_array(removed, f"range_{name}").tolist() for name in ("sha256", "start", "stop", "unit", "reason"))
    return Decisions(
        verdicts={identity: Verdict(keep, reason) for identity, keep, reason in zip(*columns, strict=True)},
        groups=_read_groups(group(root, "groups")),
        events=tuple(Event(*row) for row in zip(*events, strict=True)),
        removed_sources=frozenset(read_array(removed, "source_sha256").tolist()),
        removed_ranges=tuple(RemovedRange(*row) for row in zip(*ranges, strict=True)),
        length_series=_read_series(root),
    )


def _read_series(root: h5py.Group) -> LengthSeries:
    """Return the points of the length series; none in a study written before there were any."""
    if "length_series" not in root:
        return LengthSeries()
    home = group(root, "length_series")
    columns = (map(str, read_array(home, name).tolist()) for name in _SERIES)
    return LengthSeries(str(read_array(home, "unit")[0]), tuple(zip(*columns, strict=True)))


def _read_groups(home: h5py.Group) -> dict[str, Group]:
    heads = [read_array(home, name).tolist() for name in ("name", "colour", "symbol")]
    members: list[set[str]] = [set() for _ in heads[0]]
    for number, identity in zip(read_array(home, "member_group"), read_array(home, "member_identity"), strict=True):
        members[number].add(str(identity))
    return {
        name: Group(frozenset(found), colour, symbol)
        for name, colour, symbol, found in zip(*heads, members, strict=True)
    }


def _texts(values: Any) -> np.ndarray[Any, Any]:
    return np.array(list(values), np.str_)


# -- history ------------------------------------------------------------------------------------------------------


def write_history(root: h5py.Group, history: History) -> None:
    """Write ``/history``: columns of all entries; the edits of new entries are appended."""
    home = group(root, "history") if "history" in root else root.create_group("history")
    kinds: dict[str, type[Any]] = {"number": np.int64, "parent": np.int64, "state": np.int64}
    for name in _HEADS:
        values = [getattr(entry, name) for entry in history.entries]
        write_array(home, name, np.array(values, kinds.get(name, np.str_)))
    edits = [_edits_bytes(entry) for entry in history.entries]
    stops = np.cumsum([len(one) for one in edits])
    write_array(home, "edits_stop", stops.astype(np.int64))
    body = np.frombuffer(b"".join(edits), np.uint8)
    if "edits" not in home:
        write_array(home, "edits", body, chunk=_EDITS_CHUNK)
        return
    kept = home["edits"].shape[0]
    home["edits"].resize((len(body),))
    home["edits"][kept:] = body[kept:]


def _edits_bytes(entry: Entry) -> bytes:
    edits = entry.plain()["edits"]
    return json.dumps(edits, ensure_ascii=False, separators=(",", ":")).encode() + b"\n"


def read_history(root: h5py.Group) -> History:
    """Return all entries."""
    home = group(root, "history")
    columns = [read_array(home, name).tolist() for name in _HEADS]
    body, stops = read_array(home, "edits").tobytes(), read_array(home, "edits_stop").tolist()
    entries = []
    for start, stop, *head in zip([0, *stops[:-1]], stops, *columns, strict=True):
        plain = dict(zip(_HEADS, head, strict=True))
        entries.append(Entry.parse({**plain, "edits": json.loads(body[start:stop])}))
    return History(tuple(entries))
