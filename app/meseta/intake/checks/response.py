"""How fast an amplifier follows: rise time against current, and the limit of its slew rate, from the steepest falls.

A contact breaks faster than any amplifier of this trade follows, so what the steepest falls show is the amplifier: from
90 to 10 % of a fall whatever the order of its filter, while the tail of a fall tells the time constant of a first-order
lag alone.  An amplifier at its slew limit falls by a constant amount a sample.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Final

import numpy as np
import numpy.typing as npt

__all__ = ["RiseTimes", "half_decades", "passages", "rise_times", "slew_limit"]

Floats = npt.NDArray[np.float64]
HALF_DECADE: Final = float(np.sqrt(10.0))
HIGHEST_G0: Final = 10**1.25
"""Half decades from here have a single atom's 1 G0 in the middle of one."""
DEEP: Final = 0.1
"""A fall to less than this share of the plateau before it is one break, not a step from contact to contact."""
PLATEAU_SAMPLES: Final = 8
STEADY: Final = 0.1
SPREAD_SHARE: Final = 0.5
GRID_SAMPLES: Final = 0.8
"""Between two samples a straight line falls from 90 to 10 % in so much, however fast the amplifier."""
PLATEAU_SHARE: Final = 0.01
LEAST_FALLS: Final = 10
FASTEST_SHARE: Final = 0.1
LEAST_RUN: Final = 3
SAME_RATE: Final = 0.1
LEAST_STEP_SHARE: Final = 0.01
LIMITED_SHARE: Final = 0.3


@dataclass(frozen=True)
class RiseTimes:
    """90 to 10 % fall time of the amplifier at several conductances, as the fastest tenth of all falls shows it.

    Attributes
    ----------
    level_g0 : (levels,) float64
        Middle of the half decade of the plateaus that the falls begin from, descending.
    rise_samples : (levels,) float64
        Straight between samples, so that it is never below :data:`GRID_SAMPLES`; a contact may be slower than the
        amplifier.
    error_samples : (levels,) float64
        From the spread of the faster half of the falls, the grid of samples, and 1 % for the plateau's noise.
    falls : (levels,) int64
        Traces that fall from there.
    """

    level_g0: Floats
    rise_samples: Floats
    error_samples: Floats
    falls: npt.NDArray[np.int64]


def rise_times(values: Sequence[Floats], highest_g0: float = HIGHEST_G0, lowest_g0: float = 1e-7) -> RiseTimes:
    """Return the fall time from plateaus in every half decade that enough openings break from.

    Each opening counts with its last fall out of the half decade, where that leads below a tenth of a plateau.

    Parameters
    ----------
    values : sequence of (samples,) float64
        Conductance of openings, above their floor where they hold one.
    highest_g0, lowest_g0 : float
        Range of the plateaus; those within some times the noise of the floor must be left out by the caller.
    """
    bounds = half_decades(highest_g0, lowest_g0)
    durations = np.array([_durations(one, bounds) for one in values if len(one) > 1]).reshape(-1, len(bounds) - 1)
    found = [column[np.isfinite(column)] for column in durations.T]
    chosen = [place for place, column in enumerate(found) if len(column) >= LEAST_FALLS]
    rise = np.array([float(np.quantile(found[place], FASTEST_SHARE)) for place in chosen])
    spread = np.array([float(np.quantile(found[place], SPREAD_SHARE)) for place in chosen]) - rise
    return RiseTimes(
        np.array([bounds[place] / np.sqrt(HALF_DECADE) for place in chosen]),
        rise,
        np.sqrt(spread**2 + (PLATEAU_SHARE * rise) ** 2 + (GRID_SAMPLES * np.minimum(1.0, GRID_SAMPLES / rise)) ** 2),
        np.array([len(found[place]) for place in chosen], np.int64),
    )


def half_decades(highest_g0: float, lowest_g0: float) -> Floats:
    """Return bounds half a decade apart, from the highest down to at least the lowest."""
    count = max(int(np.log(highest_g0 / lowest_g0) / np.log(HALF_DECADE) + 1e-9), 0) + 1
    bounds: Floats = highest_g0 / np.power(HALF_DECADE, np.arange(count, dtype=np.float64))
    return bounds


def passages(values: Floats, bounds: Floats) -> Floats:
    """Return the place, in samples, of the last passage of each bound, interpolated in log G; NaN without one."""
    return np.array([_last_passage(values, bound) for bound in bounds])


def _durations(values: Floats, bounds: Floats) -> Floats:
    """Return the samples that the last fall out of each half decade takes; NaN where there is no deep one."""
    return np.array([_fall(values, high, low) for high, low in pairwise(bounds.tolist())])


def _fall(values: Floats, high: float, low: float) -> float:
    """Return the samples from 90 to 10 % of the last fall from a plateau between two bounds; NaN without one."""
    above = np.flatnonzero(values >= 0.5 * np.sqrt(high * low))
    if len(above) == 0 or above[-1] + 2 >= len(values):
        return np.nan
    begin = end = int(above[-1])
    while begin > 0 and values[begin - 1] > values[begin]:
        begin -= 1
    before = values[max(begin - PLATEAU_SAMPLES + 1, 0) : begin + 1]
    plateau = float(np.median(before))
    if not low <= plateau < high or len(before) < PLATEAU_SAMPLES or np.ptp(before) > STEADY * plateau:
        return np.nan
    while end + 1 < len(values) and values[end + 1] < values[end]:
        end += 1
    if not values[end] < DEEP * plateau:
        return np.nan
    part = values[begin - 1 : end + 1]
    return _falls_below(part, 0.1 * plateau) - _falls_below(part, 0.9 * plateau)


def _falls_below(values: Floats, bound: float) -> float:
    """Return where falling values pass a bound, straight between samples."""
    last = int(np.flatnonzero(values >= bound)[-1])
    return last + float((values[last] - bound) / (values[last] - values[last + 1]))


def _last_passage(values: Floats, bound: float) -> float:
    above = np.flatnonzero(values >= bound)
    if len(above) == 0 or above[-1] == len(values) - 1:
        return np.nan
    last = int(above[-1])
    here, after = values[last], values[last + 1]
    if not np.isfinite(after):
        return np.nan
    if after <= 0:
        return last + 1.0
    return last + float(np.log(here / bound) / np.log(here / after))


def slew_limit(volts: Sequence[Floats]) -> float | None:
    """Return the largest change of the output from sample to sample, where falls are seen to run at a limit.

    In at least a third of the openings the steepest fall runs over three steps or more that are equal within a tenth,
    and those steps agree between the openings within a tenth.

    Parameters
    ----------
    volts : sequence of (samples,) float64
        Amplifier volts of openings.

    Returns
    -------
    float or None
        In volts a sample.
    """
    usable = [one[np.isfinite(one)] for one in volts]
    usable = [one for one in usable if len(one) > LEAST_RUN + 1]
    if not usable:
        return None
    span = float(np.median([np.ptp(one) for one in usable]))
    limited = []
    for one in usable:
        steps = np.abs(np.diff(one))
        steepest = float(np.sort(steps)[-2])  # a single glitch may be faster
        if steepest < LEAST_STEP_SHARE * span or steepest == 0.0:
            continue
        if _longest_run(steps >= (1 - SAME_RATE) * steepest) >= LEAST_RUN:
            limited.append(steepest)
    if len(limited) < max(LIMITED_SHARE * len(usable), 3):
        return None
    usual = float(np.median(limited))
    agree = np.mean(np.abs(np.array(limited) - usual) <= SAME_RATE * usual)
    return usual if agree >= 0.8 else None


def _longest_run(mask: npt.NDArray[np.bool_]) -> int:
    edges = np.flatnonzero(np.diff(np.concatenate([[False], mask, [False]])))
    return int((edges[1::2] - edges[::2]).max()) if len(edges) else 0
