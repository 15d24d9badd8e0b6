"""Where a record shows the floor: windows of about a second, the band of its readings, and stretches within it."""

from __future__ import annotations

from collections.abc import Callable
from typing import Final

import numpy as np
import numpy.typing as npt

__all__ = ["NOMINAL_HERTZ", "floor_band", "probes_of", "runs_within", "windows_of"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Read = Callable[[int, int], Floats]

NOMINAL_HERTZ: Final = (50.0, 60.0)
WINDOW_SECOND: Final = 1.0
FEWEST_PERIODS: Final = 2.0
PROBE_WINDOWS: Final = 48
FLOOR_SHARE: Final = 0.2
FLOOR_WIDTHS: Final = 12.0
"""A band of 12 times the shortest stretch of values that holds a fifth of the samples takes in 6 sigma of noise, and a
sine from end to end: a fifth of its time it spends within a tenth of its span."""
SMALL: Final = 0.05
LEAST_SMALL: Final = 0.12
"""Of noise alone 8 % of the readings lie within a twentieth of the 95 % quantile of their sizes."""
SHORTEST_RUN_PERIODS: Final = 0.5
MOST_FLOOR_PROBES: Final = 400_000


def windows_of(offsets: Integers, interval: float) -> Integers:
    """Return (windows, 2) ranges of about a second that cross no end of a piece; pieces of few periods have none."""
    wanted, fewest = round(WINDOW_SECOND / interval), FEWEST_PERIODS / min(NOMINAL_HERTZ) / interval
    lengths = np.diff(offsets)
    counts = np.where(lengths >= fewest, np.maximum(lengths // wanted, 1), 0)
    begins = np.repeat(offsets[:-1], counts)
    number = np.arange(counts.sum()) - np.repeat(np.cumsum(counts) - counts, counts)
    whole, parts = np.repeat(lengths, counts), np.repeat(counts, counts)
    found: Integers = np.stack([begins + whole * number // parts, begins + whole * (number + 1) // parts], axis=1)
    return found


def probes_of(windows: Integers) -> Integers:
    """Return some windows, spread over the record."""
    return windows[np.unique(np.linspace(0, len(windows) - 1, PROBE_WINDOWS).astype(int))]


def floor_band(read: Read, windows: Integers) -> tuple[float, float]:
    """Return the values between which a reading counts as floor: round the densest fifth of all samples.

    Where enough samples are small beside the largest ones, only these are looked at: a saturated amplifier and closed
    contacts may be denser than the floor.
    """
    chosen = probes_of(windows)
    thin = max(1, int(np.sum(chosen[:, 1] - chosen[:, 0])) // MOST_FLOOR_PROBES)
    values = np.concatenate([read(int(a), int(b))[::thin] for a, b in chosen])
    values = np.sort(values[np.isfinite(values)])
    small = values[np.abs(values) < SMALL * np.quantile(np.abs(values), 0.95)] if len(values) else values
    values = small if len(small) >= LEAST_SMALL * len(values) else values
    held = int(FLOOR_SHARE * len(values))
    if held < 1:
        return np.nan, np.nan
    widths = values[held:] - values[: len(values) - held]
    place = int(np.argmin(widths))
    centre = float(np.median(values[place : place + held + 1]))
    step = np.diff(np.unique(values))
    reach = FLOOR_WIDTHS * max(float(widths[place]), float(step.min()) if len(step) else 0.0)
    return centre - reach, centre + reach


def runs_within(values: Floats, band: tuple[float, float], period: float) -> Integers:
    """Return (n, 2) ranges within the band, at most ``period`` samples long and not shorter than half of that."""
    inside = np.concatenate([[False], (values >= band[0]) & (values <= band[1]), [False]])
    edges = np.flatnonzero(np.diff(inside)).reshape(-1, 2)
    edges = edges[edges[:, 1] - edges[:, 0] >= max(SHORTEST_RUN_PERIODS * period, 2)]
    lengths = edges[:, 1] - edges[:, 0]
    counts = np.maximum(np.ceil(lengths / period), 1).astype(np.int64)
    number = np.arange(counts.sum()) - np.repeat(np.cumsum(counts) - counts, counts)
    begin, whole, parts = np.repeat(edges[:, 0], counts), np.repeat(lengths, counts), np.repeat(counts, counts)
    found = np.stack([begin + whole * number // parts, begin + whole * (number + 1) // parts], axis=1)
    return np.ascontiguousarray(found, np.int64)
