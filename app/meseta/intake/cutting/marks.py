"""Marks in a record: changes of the trace number, falls of the time, edges of a trigger."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.recording import RawChannel, Recording
from meseta.recipe.cutting import CuttingSettings

__all__ = ["counting_channel", "steps_of", "trigger_edges", "trigger_level"]

BLOCK: Final = 4_000_000
COUNTING: Final = frozenset(
    {"", "#", "i", "n", "no", "nr", "index", "row", "sample", "samples", "step", "point", "points", "sample_number"}
    | {"sample number", "sample_no", "sample no", "point_number", "data point", "datapoint", "unnamed: 0"}
)
"""Names of a column that counts rows (common practice, no source)."""
GUARD: Final = 0.1
"""A trigger has changed once it is this share of its swing beyond the level; noise on the level is no edge."""


def steps_of(
    channel: RawChannel, first: int, last: int, is_edge: Callable[[npt.NDArray[Any]], npt.NDArray[np.bool_]]
) -> list[tuple[int, int]]:
    """Return the ranges between edges, which a function of the stored differences tells."""
    edges = [first]
    for start in range(first, last, BLOCK):
        stored = np.asarray(channel.samples.read(start, min(start + BLOCK + 1, last)), np.float64)
        edges += (np.flatnonzero(is_edge(np.diff(stored))) + start + 1).tolist()
    return list(zip(edges, [*edges[1:], last], strict=True))


def counting_channel(recording: Recording) -> RawChannel | None:
    """Return the channel that counts the samples of each trace, by name and by its numbers; None where none does."""
    for channel in recording.channels:
        if channel.role != "other" or channel.shared or channel.name.strip().lower() not in COUNTING:
            continue
        values = channel.values(0, min(recording.samples, BLOCK))
        steps = np.diff(values)
        if len(steps) and bool(np.all((steps == 1) | ((steps < 0) & (values[1:] == values[0])))) and (steps < 0).any():
            return channel
    return None


def trigger_level(recording: Recording, channel: RawChannel, settings: CuttingSettings) -> tuple[float, float]:
    """Return (level, swing) of a trigger: the stated level, else half way between its least and largest reading."""
    low, high = np.inf, -np.inf
    for start, stop in recording.blocks(BLOCK):
        values = recording.values(channel, start, stop)
        if np.isfinite(values).any():
            low, high = min(low, float(np.nanmin(values))), max(high, float(np.nanmax(values)))
    swing = max(high - low, 0.0) if np.isfinite(high - low) else 0.0
    level = settings.trigger_level if settings.trigger_level is not None else (low + high) / 2
    return float(level), swing


def trigger_edges(
    recording: Recording, channel: RawChannel, span: tuple[int, int], level: tuple[float, float], edge: str
) -> list[int]:
    """Return the flat samples at which a trigger crosses its level, rising, falling or both.

    Each is the first sample on the new side of the level.
    """
    middle, swing = level
    found: list[int] = []
    state, held = 0, np.empty(0)
    for start in range(span[0], span[1], BLOCK):
        values = np.concatenate([held, recording.values(channel, start, min(start + BLOCK, span[1]))])
        base = start - len(held)
        code = np.where(values >= middle + GUARD * swing, 1, np.where(values < middle - GUARD * swing, -1, 0))
        marks = np.flatnonzero(code)
        marks = marks[marks >= len(held)]
        kinds = code[marks]
        for turn in np.flatnonzero(np.diff(np.concatenate([[state], kinds]))).tolist():
            before, now = (int(kinds[turn - 1]) if turn else state), int(kinds[turn])
            if before and edge in ("both", "rising" if now > 0 else "falling"):
                at = int(marks[turn])
                while at > 0 and (values[at - 1] >= middle) == (now > 0):
                    at -= 1
                found.append(base + at)
        state = int(kinds[-1]) if len(kinds) else state
        held = values[-min(len(values), 1000) :]
    return found
