"""What a check of the calibration found, and what checks look at."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.intake.assembly import Part
from meseta.intake.cutting.cuts import PULL
from meseta.traces import Quality

__all__ = ["STEPPED_SHARE", "Finding", "Floor", "Look", "floor_of", "look_at", "step_near"]

Floats = npt.NDArray[np.float64]
FLOOR_SHARE: Final = 0.05
MAD_TO_SIGMA: Final = 1.482602218505602
NEAR_LEVELS: Final = 41
STEPPED_SHARE: Final = 0.2
"""Readings come in steps where fewer different values than this share of the samples occur."""
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
class Floor:
    """What openings read with the contact open; NaN where they show no floor.

    Attributes
    ----------
    level_g0, sigma_g0 : float
        Where readings are densest, and the standard deviation there; 0 where the floor lies within one converter step.
    step_g0 : float
        Smallest step between different readings near the level; 0 where there is none.
    """

    level_g0: float
    sigma_g0: float
    step_g0: float

    @property
    def is_seen(self) -> bool:
        """Return whether there is a floor."""
        return bool(np.isfinite(self.sigma_g0))

    @property
    def is_within_a_step(self) -> bool:
        """Return whether the converter is too coarse to show the noise."""
        return self.is_seen and self.sigma_g0 < 0.5 * self.step_g0

    @property
    def blur_g0(self) -> float:
        """Noise, or the converter's step where that is coarser: what differs by less reads alike."""
        return max(self.sigma_g0, self.step_g0 if self.is_within_a_step else 0.0)

    def reach(self, sigmas: float, steps: float) -> float:
        """Return the conductance below which a reading may be floor; 0 where there is no floor."""
        blur = max(sigmas * self.sigma_g0, steps * self.step_g0 if self.is_within_a_step else 0.0)
        return abs(self.level_g0) + blur if self.is_seen else 0.0


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

    @cached_property
    def floor(self) -> Floor:
        """What the openings read with the contact open."""
        return floor_of(self.pooled)

    @cached_property
    def begins(self) -> Floats:
        """What each opening begins with in G0, over a twentieth of it; infinite, with its sign, beyond full scale."""
        places = ((start, 0, _share(one)) for (start, _), one in zip(self.spans, self.values, strict=True))
        return np.array([self._median(*place) for place in places])

    @cached_property
    def ends(self) -> Floats:
        """What each opening ends with in G0, as :attr:`begins`."""
        pairs = zip(self.spans, self.values, strict=True)
        places = ((start, len(one) - _share(one), len(one)) for (start, _), one in pairs)
        return np.array([self._median(*place) for place in places])

    def _median(self, begin: int, first: int, last: int) -> float:
        """Return the median over samples of the opening that begins at a flat sample.

        Where most have no trusted number, they lie beyond full scale or the ceiling of what is in series; else they are
        not known.
        """
        first = max(first, 0)
        values = self.values[self._row[begin]][first:last]
        there = values[np.isfinite(values)]
        if 2 * len(there) > len(values):
            return float(np.median(there))
        raw = np.asarray(self.part.conductance[begin + first : begin + last], np.float64)
        raw = raw[np.isfinite(raw)]
        if len(raw):
            return float(np.copysign(np.inf, np.median(raw)))
        return float("inf") if np.any(self.part.calibration.in_series_ohm) else float("nan")

    @cached_property
    def _row(self) -> dict[int, int]:
        return {start: row for row, (start, _) in enumerate(self.spans)}


def _share(values: Floats) -> int:
    return max(len(values) // 20, 3)


def look_at(part: Part, direction: str = "opening", kind: int = PULL) -> Look:
    """Return the openings to look at, or other phases: at most 200, spread over the recording."""
    rows = np.flatnonzero(np.array(part.cut.direction) == direction)
    usual = float(np.median(np.diff(part.offsets))) if part.traces else 1.0
    most = int(np.clip(MOST_SAMPLES / max(usual, 1.0), 20, 200))
    chosen = rows[np.linspace(0, len(rows) - 1, min(len(rows), most)).astype(int)] if len(rows) else rows
    spans = [(start, min(stop, start + MOST_SAMPLES)) for start, stop in _phases(part, chosen, kind)]
    spans = [(start, stop) for start, stop in spans if stop > start]
    return Look(part, tuple(spans), tuple(_trusted(part, start, stop) for start, stop in spans))


def _trusted(part: Part, start: int, stop: int) -> Floats:
    """Return the conductance of a range with NaN where the amplifier was saturated."""
    values = part.conductance[start:stop].astype(np.float64)
    if part.quality is not None:
        values[part.quality[start:stop] & Quality.SATURATED > 0] = np.nan
    return values


def _phases(part: Part, rows: npt.NDArray[np.int64], kind: int) -> list[tuple[int, int]]:
    ranges = {phase[0]: (phase[1], phase[2]) for phase in reversed(part.cut.phases) if phase[3] == kind}
    return [
        (int(part.offsets[row]) + ranges[row][0], int(part.offsets[row]) + ranges[row][1])
        for row in rows.tolist()
        if row in ranges
    ]


def floor_of(pooled: Floats) -> Floor:
    """Return the floor: where readings are densest, from the side without contacts.

    A level that is a sizeable share of the highest readings is no floor.
    """
    finite = np.sort(pooled[np.isfinite(pooled)])
    values = finite[np.abs(finite) < FLOOR_SHARE * np.quantile(np.abs(finite), 0.95)] if len(finite) else finite
    held = len(values) // 5
    if held < 5:
        return Floor(float("nan"), float("nan"), float("nan"))
    widths = values[held:] - values[: len(values) - held]
    narrowest = np.flatnonzero(widths == widths.min())  # of a stepped floor several codes may be: the middle one counts
    place = int(narrowest[len(narrowest) // 2])
    centre = float(np.median(values[place : place + held + 1]))
    is_stepped = len(np.unique(values)) < STEPPED_SHARE * len(values)
    return Floor(centre, _sigma_below(values, centre), step_near(finite, centre) if is_stepped else 0.0)


def step_near(values: Floats, centre: float) -> float:
    """Return the step between different readings near a level; 0 where there is but one. The rarest may be missing."""
    levels = np.unique(values)
    near = np.sort(levels[np.argsort(np.abs(levels - centre))[:NEAR_LEVELS]])
    return float(np.quantile(np.diff(near), 0.1)) if len(near) > 1 else 0.0


def _sigma_below(values: Floats, centre: float) -> float:
    """Return the standard deviation from the readings below the level, which no contact lifts; ties count half."""
    below, ties = centre - values[values < centre], int(np.count_nonzero(values == centre)) // 2
    return MAD_TO_SIGMA * float(np.median(np.concatenate([below, np.zeros(ties)]))) if len(below) + ties else 0.0
