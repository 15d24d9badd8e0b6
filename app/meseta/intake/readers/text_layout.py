"""How traces stand in the columns of a text table: channels of one trace, traces side by side, stretches of rows."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from contextlib import suppress
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.meaning.metadata import Plain, canonical
from meseta.intake.meaning.roles import guess_role, stem_of
from meseta.intake.readers.contents import Contents, columns_of, make_channel, whole
from meseta.intake.readers.text_form import TextForm
from meseta.intake.readers.text_headings import entries_of
from meseta.intake.readers.text_odd import OddColumns
from meseta.intake.recording import RawChannel
from meseta.intake.rows import end_to_end
from meseta.recipe.intake import IntakeSettings
from meseta.traces import ArraySamples, Samples

__all__ = ["Table", "laid_out"]

NUMBERS: Final = np.dtype(np.float64)
LOOKED_SAMPLES: Final = 100_000
GOES_ON: Final = 0.9
"""Time stamps are an axis where so many of them are later than the one before."""


@dataclass(frozen=True)
class Table:
    """Columns of numbers, rows and lines before each stretch, and how far down each column is filled."""

    columns: Sequence[Samples]
    lengths: list[int]
    said: Sequence[tuple[str, ...]]
    filled: Callable[[], Sequence[int]]
    odd: OddColumns | None = None
    """What was met in columns that are no plain numbers."""


def laid_out(table: Table, form: TextForm, doubts: list[str], settings: IntakeSettings, path: Path) -> Contents:
    """Return the content that columns of numbers make, with the headings and entries of their form."""
    names = list(form.names) if form.names else [f"column {n + 1}" for n in range(form.columns)]
    stamps: set[str] = set()
    if table.odd is not None and table.odd.is_any:
        form, table, names, more = _settled(form, table, table.odd, names)
        doubts = [*doubts, *more]
        stamps = {name for name, kind in zip(names, form.kinds, strict=False) if kind == "stamp"}
    metadata, more = canonical(form.entries, str(path))
    doubts = [*doubts, *more]
    if settings.layout == "rows" and len(table.lengths) == 1 and len(table.columns) > 1:
        names, form, table = _turned(names, form, table)
    wide = _wide_sets(names, settings) if len(table.lengths) == 1 else None
    words = {"\t": "tab", " ": "blank", ",": "comma", ";": "semicolon", "|": "bar"}[form.delimiter]
    if wide:
        if not form.labels and len(set(names)) < len(names):
            doubts.append(f"the same headings come {max(map(len, wide.values()))} times: taken as traces side by side")
        return _wide(names, form, table, wide, metadata, doubts, words)
    channels = [
        make_channel(name, column, NUMBERS, unit=unit, unit_ground="unit row")
        for name, unit, column in zip(names, form.units, table.columns, strict=True)
    ]
    channels = [_from_metadata(channel, metadata) if len(channels) <= 2 else channel for channel in channels]
    channels = _with_stamps(channels, stamps)
    offsets, starts, dataset = whole(len(table.columns[0]))
    layout = f"{words}-separated, {len(names)} column{'s' if len(names) > 1 else ''}"
    if len(table.lengths) > 1:
        offsets = np.concatenate([[0], np.cumsum(table.lengths)]).astype(np.int64)
        starts, dataset = offsets[:-1].copy(), np.full(len(table.lengths), "", np.str_)
        layout += f", {len(table.lengths)} blocks"
    rows = _said_of_each(table, form, path)
    return Contents(layout, tuple(channels), offsets, starts, dataset, metadata, rows, tuple(doubts))


def _settled(
    form: TextForm, table: Table, odd: OddColumns, names: list[str]
) -> tuple[TextForm, Table, list[str], list[str]]:
    """Return form, table and headings without the columns that cannot be carried, and doubts about odd columns.

    A word that stands in every row is an entry of the file.
    """
    names = [name or f"column {place + 1}" if place in odd.places else name for place, name in enumerate(names)]
    doubts = [*odd.doubts(), *(odd.said_of(place, names[place]) for place in odd.places)]
    entries = []
    for place in odd.places:
        word = odd.constant(place)
        with suppress(InputError):  # a word that is no value of such a constant
            canonical([(names[place], word or "")])
            entries += [(names[place], word)] if word else []
    kept = [place for place in range(len(names)) if place not in odd.places or not odd.is_left_out(place)]
    kinds = form.kinds or ("number",) * len(names)
    form = replace(
        form,
        units=tuple(form.units[place] for place in kept),
        kinds=tuple(kinds[place] for place in kept),
        labels=tuple(form.labels[place] for place in kept) if form.labels else (),
        columns=len(kept),
        entries=(*entries, *form.entries),
    )
    filled = table.filled
    table = replace(
        table,
        columns=[table.columns[place] for place in kept],
        filled=lambda: [filled()[place] for place in kept],
    )
    return form, table, [names[place] for place in kept], doubts


def _with_stamps(channels: list[RawChannel], stamps: set[str]) -> list[RawChannel]:
    """Return channels of which time stamps are the time, where nothing else is and they go on from row to row."""
    has_time = any(channel.role == "time" for channel in channels if channel.name not in stamps)
    made = []
    for channel in channels:
        if channel.name in stamps:
            steps = np.diff(channel.samples.read(0, min(len(channel.samples), LOOKED_SAMPLES)))
            goes_on = len(steps) > 0 and float(np.mean(steps > 0)) > GOES_ON
            role = "time" if goes_on and not has_time else "other"
            has_time = has_time or role == "time"
            channel = replace(channel, role=role, unit="s", ground="time stamps", confidence=0.9, doubts=())
        made.append(channel)
    return made


def _said_of_each(table: Table, form: TextForm, path: Path) -> dict[str, npt.NDArray[Any]]:
    """Return what lines before each stretch say where they do not all say the same ("bias_mV: 100", "bias_mV: 200")."""
    if not any(table.said):
        return {}
    whole_file = canonical(form.entries, str(path))[0]
    entries = [canonical(entries_of(lines, form.heading, form.delimiter), str(path))[0] for lines in table.said]
    columns = columns_of([whole_file | own for own in entries])
    return {name: column for name, column in columns.items() if len(np.unique(column)) > 1}


def _wide_sets(names: Sequence[str], settings: IntakeSettings) -> dict[str, list[int]] | None:
    """Return stem -> columns where traces stand side by side; None where columns are channels of one trace."""
    if settings.layout in ("one_trace_a_file", "long") or _are_told_apart(names, settings):
        return None
    if settings.layout == "rows" and len(set(names)) == 1:
        return {names[0]: list(range(len(names)))}
    if settings.layout in ("wide", "columns") and all(name.startswith("column ") for name in names):
        return {names[0]: [0], "column": list(range(1, len(names)))} if len(names) > 1 else None
    sets: dict[str, list[int]] = {}
    for place, name in enumerate(names):
        sets.setdefault(stem_of(name), []).append(place)
    largest = max(len(places) for places in sets.values())
    if largest < 2 or any(name.startswith("column ") for name in names):
        return None
    if all(len({names[place] for place in places}) == 1 for places in sets.values()):  # the very same headings
        return sets if all(len(places) in (1, largest) for places in sets.values()) else None
    if largest == 2 and len(sets) > 2:
        return None
    exact = {guess_role(names[place]).role for places in sets.values() if len(places) == largest for place in places}
    if len(exact) > 1 and settings.layout != "wide" and largest == 2:
        return None
    if any(len(places) not in (1, largest) for places in sets.values()):
        return None
    return sets


def _are_told_apart(names: Sequence[str], settings: IntakeSettings) -> bool:
    """Return whether the recipe says of several numbered columns ("AI0", "AI1") each what it is."""
    told = [stem_of(name) for name in names if name in settings.channels and name[-1:].isdigit()]
    return settings.layout == "auto" and len(told) > len(set(told))


def _turned(names: list[str], form: TextForm, table: Table) -> tuple[list[str], TextForm, Table]:
    """Return headings, form and columns of a table whose rows are traces; a word at the head of a row names it."""
    columns = [column.read(0, len(column)) for column in table.columns]
    heads = [place for place, kind in enumerate(form.kinds) if kind == "words"]
    words = table.odd.words(heads[0], columns[heads[0]]) if heads and table.odd else []
    rows = list(np.column_stack([column for place, column in enumerate(columns) if place not in heads]))
    filled = [int(np.flatnonzero(np.isfinite(row))[-1]) + 1 if np.isfinite(row).any() else 0 for row in rows]
    turned = Table([ArraySamples(row) for row in rows], [len(rows[0])], (), lambda: filled)
    return words or [names[0]] * len(rows), replace(form, units=("",) * len(rows), labels=(), kinds=()), turned


def _wide(
    names: Sequence[str],
    form: TextForm,
    table: Table,
    sets: dict[str, list[int]],
    metadata: dict[str, Plain],
    doubts: Sequence[str],
    words: str,
) -> Contents:
    units = form.units
    pieces = max(len(places) for places in sets.values())
    main = next(places for places in sets.values() if len(places) == pieces)
    filled = table.filled()
    kept = [filled[place] for place in main]
    offsets = np.concatenate([[0], np.cumsum(kept)]).astype(np.int64)
    channels = []
    for stem, places in sets.items():
        heading, shared = names[places[0]], len(places) != pieces
        samples: Samples = table.columns[places[0]]
        if not shared:
            samples = end_to_end([_Top(table.columns[place], n) for place, n in zip(places, kept, strict=True)])
        name = heading if shared else stem
        channel = make_channel(name, samples, NUMBERS, unit=units[places[0]], unit_ground="unit row", shared=shared)
        if not shared and channel.role in ("other", "trace_number"):
            channel = _from_metadata(_renamed(heading, stem, samples, units[places[0]]), metadata)
        channels.append(channel)
    own = form.labels or names
    numbered = [re.search(r"(\d+)\D*$", own[place]) for place in main]
    dataset = np.array([own[place] for place in main], np.str_)
    rows: list[dict[str, Plain]] = [{"column_number": int(found[1])} if found else {} for found in numbered]
    layout = f"{words}-separated, {pieces} traces side by side"
    starts = np.zeros(pieces, np.int64)
    return Contents(layout, tuple(channels), offsets, starts, dataset, metadata, columns_of(rows), tuple(doubts))


@dataclass(frozen=True)
class _Top:
    """The first samples of a column."""

    column: Samples
    rows: int

    def __len__(self) -> int:
        return self.rows

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        return self.column.read(start, min(stop, self.rows))


def _renamed(heading: str, stem: str, samples: Samples, unit: str) -> RawChannel:
    """Return a channel of numbered columns; "trace_3 (nA)" is not a trace number but a current."""
    channel = make_channel(heading, samples, NUMBERS, unit=unit, unit_ground="unit row")
    role = "other" if channel.role in ("trace_number", "phase", "range_code") else channel.role
    return RawChannel(stem, channel.samples, role, channel.unit, ground=channel.ground, confidence=channel.confidence)


def _from_metadata(channel: RawChannel, metadata: dict[str, Plain]) -> RawChannel:
    """Return a channel that says nothing itself with what lines before the numbers say ("unit: nA")."""
    if channel.role != "other":
        return channel
    lowered = {str(key).lower(): value for key, value in metadata.items()}
    said = next((str(lowered[key]) for key in ("quantity", "signal", "values", "channel") if key in lowered), "")
    unit = next((str(lowered[key]) for key in ("unit", "units", "value_unit") if key in lowered), "")
    guess = guess_role(said or unit, unit) if said or unit else None
    if guess is None or guess.role == "other":
        return channel
    return RawChannel(
        channel.name, channel.samples, guess.role, guess.unit, shared=channel.shared, ground="header", confidence=0.8
    )
