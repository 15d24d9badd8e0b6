"""What a check of the calibration found, and what checks look at."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.intake.assembly import Part
from meseta.traces import Quality

__all__ = ["Finding", "Look", "floor_of", "look_at"]

Floats = npt.NDArray[np.float64]
FLOOR_SHARE: Final = 0.05
MOST_SAMPLES: Final = 2_000_000
"""About so many samples of openings are looked at, so that a long recording takes no more memory than a short one."""


@dataclass(frozen=True)
class Finding:
    """One check: its name, whether all is well, and what was found in words."""

    check: str
    fine: bool
    text: str

    def line(self) -> str:
        """Return the finding in one line."""
        return f"{'ok' if self.fine else '! '} {self.check}: {self.text}"


@dataclass(frozen=True)
class Look:
    """The openings that checks look at.

    Attributes
    ----------
    part : Part
        With its samples and directions.
    spans : tuple of (int, int)
        Flat samples of the pull of each opening that is looked at.
    values : tuple of (samples,) float64
        Conductance of each in G0; NaN where the amplifier was saturated.
    """

    part: Part
    spans: tuple[tuple[int, int], ...]
    values: tuple[Floats, ...]

    @cached_property
    def pooled(self) -> Floats:
        """All conductances, end to end."""
        return np.concatenate(self.values) if self.values else np.empty(0)


def look_at(part: Part) -> Look:
    """Return the openings to look at: at most 200, spread over the recording."""
    rows = np.flatnonzero(np.array(part.cut.direction) == "opening")
    usual = float(np.median(np.diff(part.offsets))) if part.traces else 1.0
    most = int(np.clip(MOST_SAMPLES / max(usual, 1.0), 20, 200))
    chosen = rows[np.linspace(0, len(rows) - 1, min(len(rows), most)).astype(int)] if len(rows) else rows
    spans = [(start, min(stop, start + MOST_SAMPLES)) for start, stop in _pulls(part, chosen)]
    spans = [(start, stop) for start, stop in spans if stop > start]
    return Look(part, tuple(spans), tuple(_trusted(part, start, stop) for start, stop in spans))


def _trusted(part: Part, start: int, stop: int) -> Floats:
    """Return the conductance of a range with NaN where the amplifier was saturated."""
    values = part.conductance[start:stop].astype(np.float64)
    if part.quality is not None:
        values[part.quality[start:stop] & Quality.SATURATED > 0] = np.nan
    return values


def _pulls(part: Part, rows: npt.NDArray[np.int64]) -> list[tuple[int, int]]:
    ranges = {phase[0]: (phase[1], phase[2]) for phase in reversed(part.cut.phases) if phase[3] == 1}
    return [
        (int(part.offsets[row]) + ranges[row][0], int(part.offsets[row]) + ranges[row][1])
        for row in rows.tolist()
        if row in ranges
    ]


def floor_of(pooled: Floats) -> tuple[float, float]:
    """Return (level, standard deviation) of the floor: where readings are densest, from the side without contacts.

    A level that is a sizeable share of the highest readings is no floor.  NaN where there is none.
    """
    values = np.sort(pooled[np.isfinite(pooled)])
    if len(values):
        values = values[np.abs(values) < FLOOR_SHARE * np.quantile(np.abs(values), 0.95)]
    held = len(values) // 5
    if held < 5:
        return float("nan"), float("nan")
    place = int(np.argmin(values[held:] - values[: len(values) - held]))
    centre = float(np.median(values[place : place + held + 1]))
    below = values[values < centre] - centre
    return centre, 1.4826 * float(np.median(-below)) if len(below) else 0.0
