"""Check of the sampling rate: mains pickup seen at half or twice 50 or 60 Hz is a rate that is stated wrong."""

from __future__ import annotations

from collections.abc import Callable
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.intake.calibration.mains import SIGNIFICANT_SIGMAS, Pickup, find_pickup
from meseta.intake.calibration.mains_floor import NOMINAL_HERTZ
from meseta.intake.checks.findings import Finding
from meseta.intake.recording import Recording

__all__ = ["LEAST_OF_NOISE", "mains_elsewhere"]

Read = Callable[[int, int], npt.NDArray[np.float64]]
TIMES: Final = (0.5, 2.0)
"""Larger factors would be told by noise that drifts, or alias."""
WINDOWS: Final = 16
"""Of about a second, spread over the record: a line that counts stands out of few."""
LEAST_OF_NOISE: Final = 0.5
"""Of the other noise at the floor: drifts and decays of good floors made 0.2 of it at most."""
HUM_OF_NOISE: Final = 1.5


def mains_elsewhere(recording: Recording, read: Read, unit: str, interval_second: float) -> Finding | None:
    """Find the mains where a sampling rate that is stated a factor 2 wrong would show them.

    Below 50 Hz nothing else is known to make such a line.  Above, a rectifier hums at 100 or 120 Hz: such a line is a
    mistake only where it exceeds the other noise, whatever makes it.

    Parameters
    ----------
    recording : Recording
    read : callable
        The channel over flat samples start to stop.
    unit : str
    interval_second : float
        As stated.
    """
    if not np.isfinite(interval_second) or interval_second <= 0:
        return None
    found: list[tuple[float, float, Pickup]] = []
    for times in TIMES:
        pickup = find_pickup(recording, read, unit, interval_second * times, WINDOWS)
        if pickup is not None and _is_line(pickup):
            found.append((float(pickup.amplitude[0]), times, pickup))
    if not found:
        return None
    size, times, pickup = max(found, key=lambda one: one[0])
    nominal = min(NOMINAL_HERTZ, key=lambda hertz: abs(hertz - pickup.frequency_hertz))
    side = "high" if times > 1 else "low"
    text = (
        f"a line of {size:.3g} {unit} at {pickup.frequency_hertz * times:.4g} Hz and none at {nominal:g} Hz: is the "
        f"sampling rate (calibration.sampling_hertz) stated a factor 2 too {side}?"
    )
    return Finding("mains pickup", times > 1 and size <= HUM_OF_NOISE * pickup.noise, text)


def _is_line(pickup: Pickup) -> bool:
    size = float(pickup.amplitude[0])
    sure = size > SIGNIFICANT_SIGMAS * pickup.amplitude_error and size >= float(pickup.amplitude.max())
    return sure and size > LEAST_OF_NOISE * pickup.noise > 0.0
