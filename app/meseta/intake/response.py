"""How fast an amplifier follows: rise time against current, and the limit of its slew rate, from the steepest falls.

A contact breaks faster than any amplifier of this trade follows, so what the steepest falls show is the amplifier.  A
first-order lag of time constant tau falls by a constant part of itself a sample, in every decade alike; an amplifier at
its slew limit falls by a constant amount.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

__all__ = ["RiseTimes", "half_decades", "passages", "rise_times", "slew_limit"]

Floats = npt.NDArray[np.float64]
HALF_DECADE: Final = float(np.sqrt(10.0))
RISE_OF_HALF_DECADE: Final = float(np.log(9.0) / np.log(HALF_DECADE))
"""A lag falls from 90 to 10 % in tau ln 9 and by half a decade in tau ln(10)/2."""
LEAST_FALLS: Final = 10
FASTEST_SHARE: Final = 0.1
LEAST_RUN: Final = 3
SAME_RATE: Final = 0.1
LEAST_STEP_SHARE: Final = 0.01
LIMITED_SHARE: Final = 0.3


@dataclass(frozen=True)
class RiseTimes:
    """10 to 90 % rise time of the amplifier at several conductances, as the fastest tenth of all falls shows it.

    Attributes
    ----------
    level_g0 : (levels,) float64
        Middle of the half decade that was fallen through, descending.
    rise_samples : (levels,) float64
        At most this: a contact may only be slower than the amplifier.
    falls : (levels,) int64
        Traces that fell through.
    """

    level_g0: Floats
    rise_samples: Floats
    falls: npt.NDArray[np.int64]


def rise_times(values: Sequence[Floats], highest_g0: float = 1.0, lowest_g0: float = 1e-7) -> RiseTimes:
    """Return the rise time at every half decade that enough openings fall through.

    Each opening counts with its last passage: from the last sample at or above the upper bound to the first at or
    below the lower one, both interpolated in log G.

    Parameters
    ----------
    values : sequence of (samples,) float64
        Conductance of openings, above their floor where they hold one.
    highest_g0, lowest_g0 : float
        Range of the bounds; bounds within a few times the noise of the floor must be left out by the caller.
    """
    bounds = half_decades(highest_g0, lowest_g0)
    durations = np.array([_durations(one, bounds) for one in values if len(one) > 1]).reshape(-1, len(bounds) - 1)
    found = [column[np.isfinite(column)] for column in durations.T]
    chosen = [place for place, column in enumerate(found) if len(column) >= LEAST_FALLS]
    return RiseTimes(
        np.array([bounds[place] / np.sqrt(HALF_DECADE) for place in chosen]),
        np.array([RISE_OF_HALF_DECADE * float(np.quantile(found[place], FASTEST_SHARE)) for place in chosen]),
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
    """Return the samples from each bound to the next lower one; NaN where a bound is not passed."""
    durations: Floats = np.diff(passages(values, bounds))
    durations[durations < 0] = np.nan
    return durations


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
