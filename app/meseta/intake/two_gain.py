"""Two amplifiers on one current: what their overlap says of their gains and offsets."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from meseta.intake.calibrate import Calibration
from meseta.intake.recording import Recording
from meseta.intake.units import unit_factor

__all__ = ["Overlap", "overlap_doubts", "overlap_of"]

PROBES: Final = 50
PROBE_SAMPLES: Final = 8000
BAND: Final = (0.1, 0.9)
"""Shares of full scale between which the high-gain channel is compared; below it the low-gain channel is noise."""
LEAST_SAMPLES: Final = 20
ROUNDS: Final = 5
CLIP_SIGMAS: Final = 4.0
TOLERATED: Final = 0.02
ASSUMED_FULL_SCALE_VOLT: Final = 10.0


@dataclass(frozen=True)
class Overlap:
    """Straight line through the currents of both amplifiers where both are in range.

    Attributes
    ----------
    ratio : float
        Current by the high-gain amplifier for one ampere by the other; 1 where both gains are right.
    ratio_error : float
        Standard error of the ratio.
    offset_ampere : float
        Current by the high-gain amplifier where the other reads none.
    samples : int
    """

    ratio: float
    ratio_error: float
    offset_ampere: float
    samples: int


def overlap_of(recording: Recording, calibration: Calibration) -> Overlap | None:
    """Fit the currents of two amplifiers in their overlap, by least squares with outliers left out.

    Returns
    -------
    Overlap or None
        None where there is one amplifier, too little overlap, or gains that differ from piece to piece.
    """
    second = calibration.second
    names = ("gain_volt_per_ampere", "offset_volt", "high_gain_volt_per_ampere", "high_gain_offset_volt")
    constants = [calibration.constant(name) for name in names]
    full_scale = calibration.constant("full_scale_volt", ASSUMED_FULL_SCALE_VOLT)
    if second is None or any(np.ndim(value) for value in (*constants, full_scale)):
        return None
    gain, offset, high_gain, high_offset = (float(value) for value in constants)
    volts, high_volts = [], []
    for at in np.unique(np.linspace(0, max(recording.samples - PROBE_SAMPLES, 0), PROBES).astype(np.int64)).tolist():
        stop = min(at + PROBE_SAMPLES, recording.samples)
        volts.append(recording.values(calibration.channel, at, stop))
        high_volts.append(recording.values(second, at, stop))
    low = np.concatenate(volts) * unit_factor(calibration.channel.unit or "V", "V")
    high = np.concatenate(high_volts) * unit_factor(second.unit or "V", "V")
    share = np.abs(high) / float(full_scale)
    use = (share > BAND[0]) & (share < BAND[1]) & np.isfinite(low)
    return _fitted((low[use] - offset) / gain, (high[use] - high_offset) / high_gain)


def _fitted(low: np.ndarray, high: np.ndarray) -> Overlap | None:
    for _ in range(ROUNDS):
        if len(low) < LEAST_SAMPLES or np.ptp(low) == 0:
            return None
        centre = low.mean()
        spread = float(np.sum((low - centre) ** 2))
        ratio = float(np.sum((low - centre) * (high - high.mean()))) / spread
        offset = float(high.mean() - ratio * centre)
        rest = high - offset - ratio * low
        sigma = float(np.sqrt(np.mean(rest**2)))
        keep = np.abs(rest) <= CLIP_SIGMAS * sigma
        if keep.all():
            break
        low, high = low[keep], high[keep]
    return Overlap(ratio, sigma / float(np.sqrt(spread)), offset, len(low))


def overlap_doubts(recording: Recording, calibration: Calibration) -> tuple[str, ...]:
    """Return what is doubtful of a two-gain recording, in words; nothing where there is one amplifier."""
    if calibration.second is None:
        return ()
    doubts = []
    if "full_scale_volt" not in calibration.constants:
        doubts.append(
            f"two amplifiers, but no full scale is stated: the switch between them is made as if it were "
            f"{ASSUMED_FULL_SCALE_VOLT:g} V (calibration.full_scale_volt)"
        )
    found = overlap_of(recording, calibration)
    if found is None:
        doubts.append("both amplifiers are in range together too seldom to check their gains against each other")
        return tuple(doubts)
    text = (
        f"in the overlap the second amplifier reads {found.ratio:.4g} times the first, "
        f"offset {found.offset_ampere:.3g} A ({found.samples} samples)"
    )
    if abs(found.ratio - 1.0) > max(TOLERATED, 4 * found.ratio_error):
        text += ": the two gains do not fit each other"
    return (*doubts, text)
